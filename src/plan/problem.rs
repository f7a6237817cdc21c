//! What is wrong with a plan, shown under the line that caused it.

use std::ops::Range;
use std::path::PathBuf;

use annotate_snippets::{AnnotationKind, Group, Level, Renderer, Snippet};
use thiserror::Error;

/// One problem of a plan.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct PlanProblem {
    /// Byte range in the plan text.
    pub span: Range<usize>,
    /// Line, from 1.
    pub line: usize,
    /// Column in characters, from 1.
    pub column: usize,
    /// Dotted key, for example `detector.mismatch`; empty for a syntax error.
    pub key: String,
    /// What was found and what is allowed, a lowercase fragment.
    pub text: String,
    /// A way out, where one is known.
    pub hint: Option<String>,
}

impl std::fmt::Display for PlanProblem {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let separator = if self.key.is_empty() { "" } else { ": " };
        write!(f, "{}:{}: {}{separator}{}", self.line, self.column, self.key, self.text)?;
        if let Some(hint) = &self.hint {
            write!(f, " ({hint})")?;
        }
        Ok(())
    }
}

/// Returns line and column (in characters) of a byte position, both from 1.
#[must_use]
pub(super) fn line_and_column(text: &str, at: usize) -> (usize, usize) {
    let before = text.get(..at.min(text.len())).unwrap_or(text);
    let line = before.matches('\n').count() + 1;
    let start = before.rfind('\n').map_or(0, |newline| newline + 1);
    (line, before[start..].chars().count() + 1)
}

/// Why a plan file gives no plan.
#[derive(Debug, Clone, Error)]
pub enum PlanFailure {
    /// A path cannot be opened or read.
    #[error("{}: {reason}", path.display())]
    Io {
        /// The path.
        path: PathBuf,
        /// Why, in words.
        reason: String,
    },
    /// The content cannot be used.
    #[error("{source_name}: {} problem(s), the first: {}", problems.len(), problems.first().map(ToString::to_string).unwrap_or_default())]
    Content {
        /// Every problem, in file order.
        problems: Vec<PlanProblem>,
        /// Name of the plan for messages.
        source_name: String,
        /// The plan text.
        text: String,
    },
}

/// Returns all problems as a person reads them: each under its line, then a count.
#[must_use]
pub fn render_problems(problems: &[PlanProblem], source_name: &str, text: &str, colour: Colour) -> String {
    let renderer = match colour {
        Colour::Plain => Renderer::plain(),
        Colour::Styled => Renderer::styled(),
    };
    let mut out = String::new();
    for problem in problems {
        let title =
            if problem.key.is_empty() { problem.text.clone() } else { format!("{}: {}", problem.key, problem.text) };
        // A span at the very end of the text still needs a place to point at.
        let start = problem.span.start.min(text.len());
        let end = problem.span.end.clamp(start, text.len());
        let snippet = Snippet::source(text).path(source_name).annotation(AnnotationKind::Primary.span(start..end));
        let mut group: Group<'_> = Level::ERROR.primary_title(title).element(snippet);
        if let Some(hint) = &problem.hint {
            group = group.element(Level::HELP.message(hint.as_str()));
        }
        out.push_str(&renderer.render(&[group]));
        out.push_str("\n\n");
    }
    let count = problems.len();
    out.push_str(&format!("{source_name}: {count} problem{}", if count == 1 { "" } else { "s" }));
    out
}

/// Whether a text carries terminal colours.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Colour {
    /// Plain text.
    Plain,
    /// Terminal escape codes.
    Styled,
}
