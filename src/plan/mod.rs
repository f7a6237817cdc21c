//! The plan file, read and checked: after this stage nothing can be malformed.

mod channels;
mod checked;
mod choices;
mod example;
mod file;
mod hardware;
pub mod keys;
mod locate;
mod measurements;
mod modulation;
mod parse;
mod problem;
mod reader;
mod register_map;
mod rewrite;
mod schema;
mod spurs;
mod tables;

pub use crate::loop_model::OscillatorNoise;
pub use crate::tones::Mechanism;
pub use channels::{MOST_CHANNELS, MOST_DENSE_CHANNELS};
pub use checked::{
    Alternatives, Analysis, Anchor, AnchorPlace, Boundary, ChannelGroup, ChannelList, Clock, Detector, Divider, Gain,
    Guard, Identity, Limits, LoopEdge, LoopPlan, Mask, MismatchPoints, ModulatorPlan, Oscillator, Plan, Reference,
    Victim,
};
pub use example::example_plan;
pub use file::{demo_plan, read_dense_plan_file, read_plan_file};
pub use measurements::{Measured, MeasuredProblem, parse_measurements};
pub use parse::{parse_dense_plan, parse_plan};
pub use problem::{Colour, PlanFailure, PlanProblem, render_problems};
pub use register_map::{FieldPlace, MapRegister, RegisterMap, RegisterMapError, parse_register_map, read_register_map};
pub use rewrite::{Place, rewritten};
pub use schema::json_schema;
