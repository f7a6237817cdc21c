//! The plots of a report set, each a picture with its own words.

mod boundaries;
mod channel;
mod frame;
mod margins;
mod options;
mod sequence;
mod simulation;
mod spectrum;
mod tone_map;

pub(crate) use channel::{budget_svg, offset_svg};
pub(crate) use sequence::sequence_svg;
pub(crate) use simulation::{settling_svg, simulation_svg};

use super::ReportError;
use super::svg_backend::{on_paper, standalone};
use crate::assess::Verdict;
use crate::decide::dossier::Dossier;
use crate::survey::SurveyResult;

use super::paint::Paint;

/// One plot.
#[derive(Debug, Clone)]
pub(crate) struct Plot {
    /// File name without its ending.
    pub name: &'static str,
    /// What to read from it.
    pub caption: String,
    /// Width and height.
    pub size: (u32, u32),
    /// The picture as it stands in the page.
    pub svg: String,
}

impl Plot {
    /// Returns the picture as a file of its own.
    pub(crate) fn file(&self) -> String {
        standalone(self.size, &self.svg)
    }

    /// Returns the picture as a file with these colours alone.
    pub(crate) fn file_with(&self, css: &str) -> String {
        on_paper(self.size, &self.svg, css)
    }
}

/// Returns every plot that the result has figures for, in reading order.
pub(crate) fn plots(result: &SurveyResult, dossier: &Dossier) -> Result<Vec<Plot>, ReportError> {
    let budget = match &dossier.budget {
        Some((place, budget)) => channel::budget_plot(&result.channels[*place], budget)?,
        None => None,
    };
    let drawn = [
        boundaries::boundaries(result)?,
        tone_map::tone_map(result)?,
        spectrum::spectrum(result)?,
        margins::margins(result)?,
        options::options(dossier.comparison.as_ref())?,
        budget,
    ];
    Ok(drawn.into_iter().flatten().collect())
}

fn paint_of(verdict: Verdict) -> Paint {
    match verdict {
        Verdict::Clear => Paint::Clear,
        Verdict::Marginal => Paint::Marginal,
        Verdict::Bad => Paint::Bad,
    }
}
