//! The plan file, read and checked: after this stage nothing can be malformed.

mod checked;
mod locate;

pub use crate::loop_model::OscillatorNoise;
pub use crate::tones::Mechanism;
pub use checked::{
    Alternatives, Analysis, Anchor, AnchorPlace, Boundary, ChannelGroup, ChannelList, Clock, Detector, Divider, Gain,
    Guard, Identity, Limits, LoopEdge, LoopPlan, Mask, MismatchPoints, ModulatorPlan, Oscillator, Plan, Reference,
};
