//! Why a report set cannot be made or written.

use std::path::PathBuf;

use thiserror::Error;

/// Why a report set cannot be made or written.
#[derive(Debug, Error)]
pub enum ReportError {
    /// A figure is NaN or infinite; no writer replaces it.
    #[error("the figure {key} is {found}; only finite figures or \"unknown\" can be written")]
    NotFinite {
        /// Key of the figure.
        key: String,
        /// What was found.
        found: f64,
    },
    /// A value has no JSON form.
    #[error("{key} has no JSON form: {found}")]
    Serialize {
        /// Key of the value.
        key: String,
        /// What was found.
        found: String,
    },
    /// The table writer failed.
    #[error("channels.csv cannot be put together: {0}")]
    Csv(#[from] csv::Error),
    /// A plot cannot be drawn.
    #[error("the plot {plot} cannot be drawn: {found}")]
    Plot {
        /// Which plot.
        plot: &'static str,
        /// What went wrong.
        found: String,
    },
    /// The page cannot be put together.
    #[error("the page cannot be put together: {0}")]
    Page(#[from] askama::Error),
    /// No browser is at hand that could print the page.
    #[error(
        "--pdf needs a Chromium, and none was found (tried {tried}); install one, name it in THORNMAP_CHROMIUM, or print report.html from any browser"
    )]
    NoBrowser {
        /// Names tried.
        tried: String,
    },
    /// The browser did not print the page.
    #[error("{name} did not print report.html: {found}; print it from any browser")]
    Browser {
        /// Its name.
        name: String,
        /// What happened.
        found: String,
    },
    /// The output folder holds something else.
    #[error(
        "{} holds {found} and no report set of ours; choose a folder that is absent, empty or an earlier report set",
        path.display()
    )]
    NotOurs {
        /// The folder.
        path: PathBuf,
        /// One of the things in it.
        found: String,
    },
    /// The output path is no folder.
    #[error("{} is a file; the output must be a folder", path.display())]
    NotAFolder {
        /// The path.
        path: PathBuf,
    },
    /// The system refused.
    #[error("{} cannot be {action}: {source}; {kept}", path.display())]
    Io {
        /// The path.
        path: PathBuf,
        /// What was tried, for example `written`.
        action: &'static str,
        /// What is on disk now.
        kept: &'static str,
        /// The system's reason.
        source: std::io::Error,
    },
}
