//! `survey`: the whole plan.

use std::path::{Path, PathBuf};

use crate::assess::{AssessError, ChannelResult};
use crate::decide::dossier::{Dossier, MOST_CHANNELS, dossier, noise_budget, steps};
use crate::plan::{Plan, demo_plan};
use crate::report::{
    ChannelRows, Detail, RenderOptions, ReportError, ReportFile, StreamedSet, add_files, assemble, beat_files,
    beats_text, check_target, document_files, pdf, read_file, survey_json, write_set,
};
use crate::survey::{Keep, Steps, SurveyResult, beats, survey, survey_in_blocks};

use super::arguments::{CuresChoice, DetailChoice, FailOn, SurveyArguments};
use super::failure::Failure;
use super::output::{self, Voice};
use super::plan_file;
use super::progress::Bar;

/// Channels up to which everything is written in full unless `--detail` says otherwise.
const FULL_DETAIL_CHANNELS: u64 = 20_000;

/// Runs `survey`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &SurveyArguments) -> Result<(), Failure> {
    let voice = Voice::from_quiet(arguments.common.quiet);
    let plan = match &arguments.plan {
        Some(path) => plan_file::read(path)?,
        None => demo_plan(),
    };
    let neighbours = arguments.beside.iter().map(|path| plan_file::read(path)).collect::<Result<Vec<Plan>, _>>()?;
    let out = arguments.out.clone().unwrap_or_else(|| PathBuf::from("reports").join(&plan.stem));
    check_target(&out).map_err(report_failure)?;
    let channels = plan.channel_count();
    let detail = match arguments.detail {
        Some(DetailChoice::All) => Detail::All,
        Some(DetailChoice::Flagged) => Detail::Flagged,
        None if channels > FULL_DETAIL_CHANNELS => Detail::Flagged,
        None => Detail::All,
    };
    let options = RenderOptions { detail, markdown: arguments.markdown, png: arguments.png };
    let bar = Bar::new(channels, "channels", voice);
    // Beats and cures look at every channel again, so all are kept then.
    let is_streamed =
        channels > FULL_DETAIL_CHANNELS && neighbours.is_empty() && arguments.cures != CuresChoice::Always;
    let surveyed = if is_streamed {
        in_pool(arguments.common.jobs, || streamed(&plan, &out, &options, &bar))?
    } else {
        let whole = || survey(&plan, &|items| bar.advance(items)).map(|result| (result, None)).map_err(Stopped::from);
        in_pool(arguments.common.jobs, whole)?
    };
    let (result, stream) = surveyed.map_err(|stopped| match stopped {
        Stopped::Assess(error) => assess_failure(&plan, &error),
        Stopped::Report(error) => report_failure(error),
    })?;
    bar.finish();
    let dossier = in_pool(arguments.common.jobs, || decisions(&result, arguments.cures, voice))?
        .map_err(|error| assess_failure(&plan, &error))?;
    let files = files(&result, &dossier, &options, arguments.pdf).map_err(report_failure)?;
    match stream {
        Some(set) => set.finish(&result, files, &options),
        None => assemble(&result, files, &options).and_then(|set| write_set(&out, &set)),
    }
    .map_err(report_failure)?;
    if !neighbours.is_empty() {
        let found = in_pool(arguments.common.jobs, || beats(&result.channels, &plan, &neighbours))?
            .map_err(|error| assess_failure(&plan, &error))?;
        add_files(&out, &beat_files(&plan, &found).map_err(report_failure)?).map_err(report_failure)?;
        voice.say(beats_text(&found).trim_end());
    }
    for warning in &result.warnings {
        voice.say(&format!("warning: {warning}"));
    }
    if let Some(worst_db) = result.method_check.worst_difference_db {
        let checked = result.method_check.channels;
        voice.say(&format!(
            "method check: {checked} channels against their whole period, worst difference {worst_db:.3} dB"
        ));
    }
    voice.say(&verdict_line(&result, &out));
    if arguments.common.json {
        let text = if is_streamed {
            String::from_utf8_lossy(&read_file(&out.join("survey.json")).map_err(report_failure)?).into_owned()
        } else {
            survey_json(&result, &options).map_err(report_failure)?
        };
        output::print(&text)?;
    }
    flagged(arguments.common.fail_on, result.summary.bad, result.summary.marginal)
}

/// Returns the decisions for the report, as many as are asked for.
fn decisions(result: &SurveyResult, cures: CuresChoice, voice: Voice) -> Result<Dossier, AssessError> {
    let is_wanted = match cures {
        CuresChoice::Auto => result.summary.channels <= MOST_CHANNELS,
        CuresChoice::Always => true,
        CuresChoice::Never => false,
    };
    if !is_wanted {
        return Ok(Dossier { budget: noise_budget(result)?, ..Dossier::default() });
    }
    let bar = Bar::new(steps(&result.plan), "cures and options", voice);
    let found = dossier(result, &|| bar.advance(1));
    bar.finish();
    found
}

/// Returns the page and its pictures, printed as well where that is asked for.
fn files(
    result: &SurveyResult,
    dossier: &Dossier,
    options: &RenderOptions,
    is_printed: bool,
) -> Result<Vec<ReportFile>, ReportError> {
    let mut files = document_files(result, dossier, options)?;
    let page = files.iter().find(|file| file.path == "report.html").filter(|_| is_printed);
    if let Some(page) = page {
        let bytes = pdf(&page.bytes, std::env::var_os("THORNMAP_CHROMIUM").as_ref())?;
        files.push(ReportFile { path: "report.pdf".into(), bytes });
    }
    Ok(files)
}

/// Why a survey that writes as it goes stops.
enum Stopped {
    Assess(AssessError),
    Report(ReportError),
}

impl From<AssessError> for Stopped {
    fn from(error: AssessError) -> Self {
        Self::Assess(error)
    }
}

impl From<ReportError> for Stopped {
    fn from(error: ReportError) -> Self {
        Self::Report(error)
    }
}

/// Surveys a large plan: rows go to disk as they come, and the result holds the worst channels and a sample.
fn streamed(
    plan: &Plan,
    out: &Path,
    options: &RenderOptions,
    bar: &Bar,
) -> Result<(SurveyResult, Option<StreamedSet>), Stopped> {
    let mut set = StreamedSet::new(out)?;
    let steps = Steps {
        render: &|channels: &[ChannelResult]| Ok::<_, Stopped>(ChannelRows::new(channels, options)?),
        done: &|items| bar.advance(items),
    };
    let result = survey_in_blocks(plan, Keep::WorstAndSample, &steps, &mut |rows| Ok(set.add(&rows)?))?;
    Ok((result, Some(set)))
}

/// Returns the run in one sentence.
fn verdict_line(result: &SurveyResult, out: &Path) -> String {
    let summary = &result.summary;
    format!(
        "{}: {} channels: {} clear, {} marginal, {} bad; report set in {}",
        result.plan.identity.title,
        summary.channels,
        summary.clear,
        summary.marginal,
        summary.bad,
        out.display()
    )
}

/// Runs work in a pool of the wanted size.
///
/// # Errors
/// `InputOutput` when the threads cannot be started.
pub fn in_pool<T: Send>(jobs: Option<u16>, work: impl FnOnce() -> T + Send) -> Result<T, Failure> {
    let mut builder = rayon::ThreadPoolBuilder::new();
    if let Some(jobs) = jobs {
        builder = builder.num_threads(usize::from(jobs));
    }
    let pool = builder.build().map_err(|error| Failure::InputOutput(format!("error: threads: {error}")))?;
    Ok(pool.install(work))
}

/// Returns the failure of a plan that is refused as a whole.
pub fn assess_failure(plan: &Plan, error: &AssessError) -> Failure {
    Failure::Content(format!("error: plan \"{}\": {error}", plan.identity.title))
}

/// Returns the failure of a writer.
pub fn report_failure(error: ReportError) -> Failure {
    Failure::InputOutput(format!("error: {error}"))
}

/// Returns status 3 when the wanted state occurs.
///
/// # Errors
/// `Flagged` when it does.
pub fn flagged(fail_on: Option<FailOn>, bad: u64, marginal: u64) -> Result<(), Failure> {
    let met = match fail_on {
        None => false,
        Some(FailOn::Bad) => bad > 0,
        Some(FailOn::Marginal) => bad + marginal > 0,
    };
    if met { Err(Failure::Flagged) } else { Ok(()) }
}
