//! The report set of one survey: data files, page, pictures.

use super::document::document;
use super::page::page;
use super::plots::plots;
use super::{
    MARKER, MARKER_HEAD, RenderOptions, ReportError, ReportFile, ReportSet, channels_csv, markdown, png, survey_json,
};
use crate::decide::dossier::Dossier;
use crate::survey::SurveyResult;

/// Returns the report set of a survey alone, as [`render_with`] with an empty dossier.
///
/// # Errors
/// As [`render_with`].
pub fn render(result: &SurveyResult, options: &RenderOptions) -> Result<ReportSet, ReportError> {
    render_with(result, &Dossier::default(), options)
}

/// Returns the report set of a survey and its dossier: `report.html`, `channels.csv`, `survey.json`, `plots/*.svg` and
/// the marker, with `report.md` and `plots/*.png` where they are asked for.
///
/// The same result gives the same bytes on every machine: no clock, no hash order, rounded figures.
///
/// # Errors
/// `NotFinite` where a figure is NaN or infinite, with its key; `Serialize`, `Csv`, `Plot` and `Page` where a writer
/// itself fails.
pub fn render_with(
    result: &SurveyResult,
    dossier: &Dossier,
    options: &RenderOptions,
) -> Result<ReportSet, ReportError> {
    let plots = plots(result, dossier)?;
    let doc = document(result, dossier, options, &plots);
    let mut files = vec![
        ReportFile { path: "survey.json".into(), bytes: survey_json(result, options)?.into_bytes() },
        ReportFile { path: "channels.csv".into(), bytes: channels_csv(&result.channels)? },
        ReportFile { path: "report.html".into(), bytes: page(&doc)?.into_bytes() },
    ];
    if options.markdown {
        files.push(ReportFile { path: "report.md".into(), bytes: markdown::markdown(&doc)?.into_bytes() });
    }
    for plot in &plots {
        files.push(ReportFile { path: format!("plots/{}.svg", plot.name), bytes: plot.file().into_bytes() });
        if options.png {
            files.push(ReportFile { path: format!("plots/{}.png", plot.name), bytes: png::png(plot)? });
        }
    }
    files.sort_by(|a, b| a.path.cmp(&b.path));
    let mut marker = format!("{MARKER_HEAD}\n");
    for file in &files {
        marker.push_str(&file.path);
        marker.push('\n');
    }
    files.push(ReportFile { path: MARKER.into(), bytes: marker.into_bytes() });
    Ok(ReportSet { files })
}
