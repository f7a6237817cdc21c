//! All channels in parallel, the summary, and the run's own check of its fast path.

mod result;

pub use result::{LoopSummary, MethodCheck, Range3, SpectrumView, Summary, SurveyResult};
