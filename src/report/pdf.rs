//! The page on paper: printed by a Chromium that the machine has.

use std::ffi::OsString;
use std::fs;
use std::path::Path;
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};

use super::ReportError;

/// Names under which a Chromium is found on the search path.
const NAMES: [&str; 2] = ["chromium", "chromium-browser"];
/// Longest time for one print.
const LONGEST: Duration = Duration::from_secs(120);

/// Returns a page printed as PDF on A4, or `NoBrowser` where none is at hand; `browser` names one to take instead of
/// those on the search path.
///
/// # Errors
/// `NoBrowser` with what was tried; `Browser` where it fails or takes too long; `Io` for the folder it works in.
pub fn pdf(html: &[u8], browser: Option<&OsString>) -> Result<Vec<u8>, ReportError> {
    let refused = |path: &Path, action, source| ReportError::Io {
        path: path.to_owned(),
        action,
        kept: "the report set was not written",
        source,
    };
    let folder = tempfile::tempdir().map_err(|source| refused(&std::env::temp_dir(), "written to", source))?;
    let (page, paper) = (folder.path().join("report.html"), folder.path().join("report.pdf"));
    fs::write(&page, html).map_err(|source| refused(&page, "written", source))?;
    let tried: Vec<OsString> = match browser {
        Some(name) => vec![name.clone()],
        None => NAMES.iter().map(OsString::from).collect(),
    };
    for name in &tried {
        // Where it may not build its sandbox (as root in a container) it is asked again without: the page is ours, runs
        // no code but its own and asks for nothing.
        let mut failure = None;
        for more in [&[][..], &["--no-sandbox"]] {
            match print(name, more, folder.path(), &page, &paper) {
                Printed::NotThere => break,
                Printed::Done => return fs::read(&paper).map_err(|source| refused(&paper, "read", source)),
                Printed::Failed(found) => failure = Some(found),
            }
        }
        if let Some(found) = failure {
            return Err(ReportError::Browser { name: name.to_string_lossy().into_owned(), found });
        }
    }
    let tried = tried.iter().map(|name| name.to_string_lossy()).collect::<Vec<_>>().join(", ");
    Err(ReportError::NoBrowser { tried })
}

enum Printed {
    NotThere,
    Done,
    Failed(String),
}

fn print(name: &OsString, more: &[&str], folder: &Path, page: &Path, paper: &Path) -> Printed {
    let mut target = OsString::from("--print-to-pdf=");
    target.push(paper);
    let mut profile = OsString::from("--user-data-dir=");
    profile.push(folder.join("profile"));
    let child = Command::new(name)
        .args(more)
        .args(["--headless", "--disable-gpu", "--no-first-run", "--no-pdf-header-footer"])
        .args(["--disable-background-networking", "--disable-component-update", "--disable-sync"])
        .args([profile, target])
        .arg(page)
        .stdin(Stdio::null())
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .spawn();
    let mut child = match child {
        Ok(child) => child,
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => return Printed::NotThere,
        Err(error) => return Printed::Failed(error.to_string()),
    };
    let start = Instant::now();
    loop {
        match child.try_wait() {
            Ok(Some(status)) if status.success() && paper.is_file() => return Printed::Done,
            Ok(Some(status)) => return Printed::Failed(format!("it ended with {status} and no file")),
            Ok(None) if start.elapsed() > LONGEST => {
                // Whether it still runs or has just ended, it is not waited for any longer.
                let _ = child.kill();
                let _ = child.wait();
                return Printed::Failed(format!("no file after {} s", LONGEST.as_secs()));
            }
            Ok(None) => std::thread::sleep(Duration::from_millis(50)),
            Err(error) => return Printed::Failed(error.to_string()),
        }
    }
}
