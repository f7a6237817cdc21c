//! One channel, all stages: the one place that calls them.

mod candidate;
mod channel;
mod curve_point;
mod lines;
mod listing;
mod noise;
mod noise_at;
mod offset_sweep;
mod placement;
mod result;
mod sequence;
mod setup;
mod simulate;
mod smooth_table;
mod tables;
mod tolerance;
mod verdict;
mod victims;
mod view;
mod whole_period;
mod zone;

pub use curve_point::CurvePoint;
pub use lines::{FamilyLines, Line, LinesError, PeriodLine, Scratch};
pub use noise::{ChannelNoise, ModulatorShare, budget_of, channel_budget};
pub use offset_sweep::{OffsetSweep, OffsetTried, offset_sweep};
pub use placement::{Placement, PlacementError, place};
pub use result::{BoundaryNear, ChannelResult, Contributions, Illegal, Method, Origin, Reason, Rule, Tone, Verdict};
pub use sequence::{
    Capture, CaptureTone, DitherFacts, Recognised, Recognition, Search, SeedTried, SequenceFacts, SequenceLine,
    best_seeds, captured_tones, recognise, sequence_facts,
};
pub use setup::{AssessError, LoopSource, Setup, gain_at, interpolate};
pub use simulate::{
    ComparedTone, DEFAULT_CYCLES, Settling, SimulateError, SimulatedChannel, simulate_channel, simulate_step,
};
pub use verdict::{Evidence, MaskState, judge};
pub use view::{SpectrumView, spectrum_view};
pub use whole_period::LineCheck;
pub use zone::edge_of;
