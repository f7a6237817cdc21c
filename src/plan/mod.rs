//! The plan file, read and checked: after this stage nothing can be malformed.

mod checked;

pub use crate::tones::Mechanism;
pub use checked::{
    Alternatives, Analysis, Anchor, AnchorPlace, Boundary, ChannelGroup, ChannelList, Clock, Detector, Divider, Gain,
    Guard, Identity, Limits, LoopEdge, LoopPlan, Mask, MismatchPoints, ModulatorPlan, Oscillator, OscillatorNoise,
    Plan, Reference,
};
