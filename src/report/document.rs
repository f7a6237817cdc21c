//! The page and its plots.

use super::page::page;
use super::plots::plots;
use super::{RenderOptions, ReportError, ReportFile};
use crate::survey::SurveyResult;

/// Returns the page and its plots.
pub(crate) fn document(result: &SurveyResult, options: &RenderOptions) -> Result<Vec<ReportFile>, ReportError> {
    let plots = plots(result)?;
    let html = page(result, options, &plots)?;
    let mut files = vec![ReportFile { path: "report.html".into(), bytes: html.into_bytes() }];
    files.extend(
        plots
            .iter()
            .map(|plot| ReportFile { path: format!("plots/{}.svg", plot.name), bytes: plot.file().into_bytes() }),
    );
    Ok(files)
}
