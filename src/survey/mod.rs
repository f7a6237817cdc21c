//! All channels in parallel, the summary, and the run's own check of its fast path.

mod beats;
mod kept;
mod method_check;
mod result;
mod run;
mod spectrum_view;
mod table_check;
mod tally;

pub use crate::assess::SpectrumView;
pub use beats::{Beat, Node, beats};
pub use kept::Keep;
pub use result::{LoopSummary, MethodCheck, Range3, Summary, SurveyResult};
pub use run::{Steps, assess_all, summarise, survey, survey_in_blocks};
