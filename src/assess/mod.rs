//! One channel, all stages: the one place that calls them.

mod candidate;
mod lines;
mod listing;
mod placement;
mod result;
mod verdict;

pub use placement::{Placement, PlacementError, place};
pub use result::{BoundaryNear, ChannelResult, Contributions, Illegal, Method, Origin, Reason, Rule, Tone, Verdict};
pub use verdict::{Evidence, MaskState, judge};
