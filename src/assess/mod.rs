//! One channel, all stages: the one place that calls them.

mod candidate;
mod channel;
mod lines;
mod listing;
mod noise;
mod noise_at;
mod placement;
mod result;
mod setup;
mod verdict;
mod view;
mod whole_period;

pub use lines::{FamilyLines, Line, LinesError, PeriodLine, Scratch};
pub use noise::{ChannelNoise, channel_budget};
pub use placement::{Placement, PlacementError, place};
pub use result::{BoundaryNear, ChannelResult, Contributions, Illegal, Method, Origin, Reason, Rule, Tone, Verdict};
pub use setup::{AssessError, LoopSource, Setup, gain_at};
pub use verdict::{Evidence, MaskState, judge};
pub use view::{SpectrumView, spectrum_view};
pub use whole_period::LineCheck;
