//! The plan file, read and checked: after this stage nothing can be malformed.

mod checked;

pub use checked::{
    Alternatives, Analysis, Anchor, AnchorPlace, Boundary, ChannelGroup, ChannelList, Clock, Detector, Divider, Gain,
    Guard, Identity, Limits, LoopEdge, LoopPlan, Mask, Mechanism, MismatchPoints, ModulatorPlan, Oscillator,
    OscillatorNoise, Plan, Reference,
};
