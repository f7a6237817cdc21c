//! The report set: pure bytes from one survey result, and the one place that writes them to a folder.

mod beats;
mod calibration;
mod channel;
mod columns;
mod comparison;
mod difference;
mod document;
mod error;
mod figures;
mod firmware;
mod firmware_c;
mod identification;
mod json;
mod markdown;
mod measurement;
mod page;
mod paint;
mod pdf;
mod plots;
mod png;
mod policy;
mod positions;
mod remedy;
mod render;
mod sequence;
mod sequence_files;
mod simulation;
mod single_file;
mod survey_json;
mod svg_backend;
mod write;

pub use beats::{beat_files, beats_text};
pub use calibration::{calibrated_plan, calibration_json, calibration_text};
pub use channel::{channel_files, channel_json, channel_text, offset_text};
pub use columns::{COLUMNS, Cell, Column, channels_csv};
pub use comparison::{comparison_files, comparison_json, comparison_text};
pub use difference::{difference_html, difference_json, difference_text};
pub use error::ReportError;
pub use firmware::{FirmwareFormat, firmware_bytes};
pub use identification::{identification_json, identification_text};
pub use json::json_text;
pub use measurement::{MEASURED_COLUMNS, measure_files, measure_json, measure_text};
pub use pdf::pdf;
pub use positions::{hunt_json, hunt_text, intervals_json, intervals_text};
pub use remedy::{remedy_files, remedy_json, remedy_text};
pub use render::{render, render_with};
pub use sequence::{OffsetScale, capture_json, capture_text, seeds_text, sequence_json, sequence_plot, sequence_text};
pub use sequence_files::{CaptureError, SequenceForm, read_capture, sequence_bytes};
pub use simulation::{
    settling_files, settling_json, settling_text, simulation_files, simulation_json, simulation_text,
};
pub use single_file::{read_file, write_file};
pub use survey_json::survey_json;
pub use write::{add_files, check_target, write_set};

use serde::Serialize;

/// The file that marks a folder as ours; its lines after the first name the files of the set.
pub const MARKER: &str = ".thornmap-report";

/// First line of the marker file.
pub(crate) const MARKER_HEAD: &str = "thornmap report set 1";

/// Which channels `survey.json` lists.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Detail {
    /// Every channel.
    #[default]
    All,
    /// Only bad and marginal channels.
    Flagged,
}

/// What a caller may choose about a report set.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct RenderOptions {
    /// Which channels `survey.json` lists.
    pub detail: Detail,
    /// Whether `report.md` is in the set.
    pub markdown: bool,
    /// Whether each plot is in the set as PNG too.
    pub png: bool,
}

/// One file of a report set.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ReportFile {
    /// Path inside the set, with `/` between its parts.
    pub path: String,
    /// The whole content.
    pub bytes: Vec<u8>,
}

/// Every file of a report set, in a fixed order; nothing is on disk yet.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ReportSet {
    /// The files.
    pub files: Vec<ReportFile>,
}

impl ReportSet {
    /// Adds a file, and its name to the marker: a later set removes it with the others.
    pub fn add(&mut self, file: ReportFile) {
        if let Some(marker) = self.files.iter_mut().find(|other| other.path == MARKER) {
            marker.bytes.extend_from_slice(format!("{}\n", file.path).as_bytes());
        }
        self.files.push(file);
    }

    /// Returns the content of a file of the set, or `None` when the set has no such file.
    #[must_use]
    pub fn get(&self, path: &str) -> Option<&[u8]> {
        self.files.iter().find(|file| file.path == path).map(|file| file.bytes.as_slice())
    }
}
