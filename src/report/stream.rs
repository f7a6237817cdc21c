//! A report set of a large plan: rows go to disk as they come, memory does not grow with them.

use std::path::Path;

use crate::assess::ChannelResult;
use crate::survey::SurveyResult;

use super::columns::{csv_header, push_rows};
use super::survey_json::{ROW_END, channel_rows_json, survey_json_around};
use super::write::{StagedFile, StagedSet};
use super::{RenderOptions, ReportError, ReportFile, ReportSet, with_marker};

/// Where the rows of survey.json wait for the counts that stand before them.
const WAITING: &str = "survey.json.rows";

/// The rows of some channels, in both forms.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ChannelRows {
    csv: String,
    json: String,
    listed: u64,
}

impl ChannelRows {
    /// Returns the rows of channels.
    ///
    /// # Errors
    /// As [`super::render`].
    pub fn new(channels: &[ChannelResult], options: &RenderOptions) -> Result<Self, ReportError> {
        let json = channel_rows_json(channels, options.detail)?;
        let listed = channels.iter().filter(|channel| super::survey_json::listed(channel, options.detail)).count();
        let mut csv = String::with_capacity(channels.len() * 1024);
        push_rows(&mut csv, channels)?;
        Ok(Self { csv, json, listed: listed as u64 })
    }
}

/// A report set whose tables are written while the survey runs.
#[derive(Debug)]
pub struct StreamedSet {
    set: StagedSet,
    csv: StagedFile,
    json: StagedFile,
    listed: u64,
}

impl StreamedSet {
    /// Opens the set that will become the folder `out_dir`.
    ///
    /// # Errors
    /// As [`super::write_set`].
    pub fn new(out_dir: &Path) -> Result<Self, ReportError> {
        let set = StagedSet::new(out_dir)?;
        let mut csv = set.create("channels.csv")?;
        csv.write(csv_header().as_bytes())?;
        let json = set.create(WAITING)?;
        Ok(Self { set, csv, json, listed: 0 })
    }

    /// Writes the next rows.
    ///
    /// # Errors
    /// `Io` where the system refuses.
    pub fn add(&mut self, rows: &ChannelRows) -> Result<(), ReportError> {
        self.listed += rows.listed;
        self.csv.write(rows.csv.as_bytes())?;
        self.json.write(rows.json.as_bytes())
    }

    /// Writes page and plots, `files`, and what stands around the rows, and puts the set in place.
    ///
    /// # Errors
    /// As [`super::render`] and [`super::write_set`].
    pub fn finish(
        self,
        result: &SurveyResult,
        files: Vec<ReportFile>,
        options: &RenderOptions,
    ) -> Result<(), ReportError> {
        let Self { set, csv, json: rows, listed } = self;
        drop(csv);
        let (head, tail) = survey_json_around(result, options, (listed == 0, result.summary.channels - listed))?;
        let mut json = set.create("survey.json")?;
        json.write(head.as_bytes())?;
        json.take_over(rows, if listed > 0 { ROW_END.len() as u64 } else { 0 })?;
        json.write(tail.as_bytes())?;
        drop(json);
        set.finish(&ReportSet { files: with_marker(files, &["channels.csv", "survey.json"]) })
    }
}
