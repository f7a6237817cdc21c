//! The only place that reads plan files.

use std::fs;
use std::io::ErrorKind;
use std::path::Path;

use super::checked::Plan;
use super::parse::{parse_dense_plan, parse_plan};
use super::problem::{PlanFailure, PlanProblem};

/// Text of the built-in demonstration plan.
const DEMO: &str = include_str!("../../configs/demo.toml");

/// Returns the checked plan of a file.
///
/// # Errors
/// `Io` when the path cannot be opened or read, `Content` with every problem otherwise.
pub fn read_plan_file(path: &Path) -> Result<Plan, PlanFailure> {
    read_with(path, parse_plan)
}

/// Returns the checked plan of a file that may hold up to [`super::MOST_DENSE_CHANNELS`] channels: for uses that
/// enumerate none.
///
/// # Errors
/// As [`read_plan_file`].
pub fn read_dense_plan_file(path: &Path) -> Result<Plan, PlanFailure> {
    read_with(path, parse_dense_plan)
}

/// A reader of plan text: [`parse_plan`] or [`parse_dense_plan`].
type Parse = fn(&str, &str, super::tables::Load) -> Result<Plan, Vec<PlanProblem>>;

fn read_with(path: &Path, parse: Parse) -> Result<Plan, PlanFailure> {
    let text = read_text(path)?;
    let folder = path.parent().unwrap_or(Path::new("")).to_owned();
    let load = |name: &str| match read_text(&folder.join(name)) {
        Ok(text) => Ok(text),
        Err(PlanFailure::Io { reason, .. }) => Err(reason),
        Err(PlanFailure::Content { problems, .. }) => {
            Err(problems.first().map(|problem| problem.text.clone()).unwrap_or_default())
        }
    };
    let stem = path.file_stem().map_or_else(|| "plan".to_owned(), |stem| stem.to_string_lossy().into_owned());
    parse(&text, &stem, &load).map_err(|problems| PlanFailure::Content {
        problems,
        source_name: path.display().to_string(),
        text,
    })
}

/// Returns the text of a file, or why there is none.
pub(super) fn read_text(path: &Path) -> Result<String, PlanFailure> {
    let io = |reason: String| PlanFailure::Io { path: path.to_owned(), reason };
    if path.is_dir() {
        return Err(io("is a folder, expected a file".to_owned()));
    }
    let bytes = fs::read(path).map_err(|error| {
        io(match error.kind() {
            ErrorKind::NotFound => "no such file".to_owned(),
            ErrorKind::PermissionDenied => "no permission to read it".to_owned(),
            _ => error.to_string(),
        })
    })?;
    String::from_utf8(bytes).map_err(|error| {
        let at = error.utf8_error().valid_up_to();
        let good = String::from_utf8_lossy(&error.as_bytes()[..at]).into_owned();
        let (line, column) = super::problem::line_and_column(&good, at);
        PlanFailure::Content {
            problems: vec![PlanProblem {
                span: at..at,
                line,
                column,
                key: String::new(),
                text: format!("not UTF-8 text: byte {at} starts no valid character"),
                hint: Some("save the file as UTF-8".to_owned()),
            }],
            source_name: path.display().to_string(),
            text: good,
        }
    })
}

/// Returns the built-in demonstration plan.
///
/// # Panics
/// Never: a test reads it.
#[must_use]
pub fn demo_plan() -> Plan {
    parse_plan(DEMO, "demo", &|name| Err(format!("the built-in plan has no file {name}")))
        .expect("the built-in plan is valid")
}
