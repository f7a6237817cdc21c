//! The page and its plots.

use super::plots::plots;
use super::{RenderOptions, ReportError, ReportFile};
use crate::survey::SurveyResult;

/// Returns the page and its plots.
pub(crate) fn document(result: &SurveyResult, _: &RenderOptions) -> Result<Vec<ReportFile>, ReportError> {
    let plots = plots(result)?;
    let files = plots
        .iter()
        .map(|plot| ReportFile { path: format!("plots/{}.svg", plot.name), bytes: plot.file().into_bytes() });
    Ok(files.collect())
}
