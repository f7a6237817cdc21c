//! The page and its plots.

use super::{RenderOptions, ReportError, ReportFile};
use crate::survey::SurveyResult;

/// Returns the page and its plots.
pub(crate) fn document(_: &SurveyResult, _: &RenderOptions) -> Result<Vec<ReportFile>, ReportError> {
    Ok(Vec::new())
}
