//! The writer: whole sets only, nothing of the user's lost.

use std::fs;
use std::path::Path;

use thornmap::report::{MARKER, ReportError, ReportFile, ReportSet, render, write_set};

use super::{ALL, fixture};

fn small(path: &str, content: &str) -> ReportSet {
    let marker = format!("thornmap report set 1\n{path}\n");
    ReportSet {
        files: vec![
            ReportFile { path: path.into(), bytes: content.into() },
            ReportFile { path: MARKER.into(), bytes: marker.into_bytes() },
        ],
    }
}

/// Returns every path below a folder, sorted.
fn listing(folder: &Path) -> Vec<String> {
    let mut paths = Vec::new();
    let mut open = vec![folder.to_owned()];
    while let Some(next) = open.pop() {
        for entry in fs::read_dir(next).unwrap() {
            let path = entry.unwrap().path();
            paths.push(path.strip_prefix(folder).unwrap().to_string_lossy().into_owned());
            if path.is_dir() {
                open.push(path);
            }
        }
    }
    paths.sort();
    paths
}

#[test]
fn writes_the_whole_set_to_an_absent_or_empty_folder() {
    let home = tempfile::tempdir().unwrap();
    let set = render(&fixture::survey(6), &ALL).unwrap();
    let empty = home.path().join("empty");
    fs::create_dir(&empty).unwrap();
    for out in [home.path().join("deep/new"), empty] {
        write_set(&out, &set).unwrap();
        for file in &set.files {
            assert_eq!(fs::read(out.join(&file.path)).unwrap(), file.bytes, "{}", file.path);
        }
    }
    assert!(!listing(home.path()).iter().any(|path| path.contains(".thornmap-new") || path.contains(".thornmap-old")));
}

#[test]
fn replaces_an_old_set_and_carries_over_what_is_not_ours() {
    let home = tempfile::tempdir().unwrap();
    let out = home.path().join("set");
    write_set(&out, &small("plots/old.svg", "old")).unwrap();
    fs::write(out.join("plots/mine.txt"), "mine").unwrap();
    fs::create_dir(out.join("notes")).unwrap();
    fs::write(out.join("notes/a.txt"), "a").unwrap();
    write_set(&out, &small("plots/new.svg", "new")).unwrap();
    assert_eq!(
        listing(home.path()),
        [
            "set",
            "set/.thornmap-report",
            "set/notes",
            "set/notes/a.txt",
            "set/plots",
            "set/plots/mine.txt",
            "set/plots/new.svg",
        ]
    );
}

#[test]
fn refuses_a_folder_that_is_not_ours_and_leaves_it_alone() {
    let home = tempfile::tempdir().unwrap();
    let set = small("report.html", "x");
    let foreign = home.path().join("foreign");
    fs::create_dir(&foreign).unwrap();
    fs::write(foreign.join("thesis.txt"), "years of work").unwrap();
    assert!(matches!(write_set(&foreign, &set), Err(ReportError::NotOurs { found, .. }) if found == "thesis.txt"));
    // A file with the marker's name but other content is no marker.
    fs::write(foreign.join(MARKER), "").unwrap();
    assert!(matches!(write_set(&foreign, &set), Err(ReportError::NotOurs { .. })));
    assert_eq!(fs::read_to_string(foreign.join("thesis.txt")).unwrap(), "years of work");
    let file = home.path().join("file");
    fs::write(&file, "text").unwrap();
    assert!(matches!(write_set(&file, &set), Err(ReportError::NotAFolder { .. })));
    assert!(matches!(
        write_set(&file.join("below"), &set),
        Err(ReportError::NotAFolder { .. } | ReportError::Io { .. })
    ));
    assert_eq!(fs::read_to_string(&file).unwrap(), "text");
}

#[cfg(target_os = "linux")]
#[test]
fn says_so_where_nothing_can_be_written() {
    // No user, not even the administrator, makes folders among the processes.
    let error = write_set(Path::new("/proc/thornmap/set"), &small("report.html", "x")).unwrap_err();
    assert!(matches!(error, ReportError::Io { action: "created", .. }), "{error}");
    assert!(error.to_string().ends_with("what was there before is untouched"), "{error}");
}

#[test]
fn keeps_the_old_set_when_the_new_one_cannot_be_written() {
    let home = tempfile::tempdir().unwrap();
    let out = home.path().join("set");
    write_set(&out, &small("report.html", "old")).unwrap();
    let before = listing(home.path());
    // A name that no system takes: the set cannot be completed.
    let mut broken = small("report.html", "new");
    broken.files.push(ReportFile { path: "x".repeat(5000), bytes: Vec::new() });
    assert!(matches!(write_set(&out, &broken), Err(ReportError::Io { action: "written", .. })));
    assert_eq!(listing(home.path()), before);
    assert_eq!(fs::read_to_string(out.join("report.html")).unwrap(), "old");
}

#[test]
fn a_marker_cannot_name_files_outside_its_folder() {
    let home = tempfile::tempdir().unwrap();
    let out = home.path().join("set");
    write_set(&out, &small("report.html", "old")).unwrap();
    fs::write(home.path().join("precious.txt"), "keep").unwrap();
    fs::write(out.join(MARKER), "thornmap report set 1\n../precious.txt\n../../precious.txt\nreport.html\n").unwrap();
    write_set(&out, &small("report.html", "new")).unwrap();
    assert_eq!(fs::read_to_string(home.path().join("precious.txt")).unwrap(), "keep");
    assert_eq!(fs::read_to_string(out.join("report.html")).unwrap(), "new");
}

#[cfg(unix)]
#[test]
fn a_link_to_a_folder_stays_a_link() {
    let home = tempfile::tempdir().unwrap();
    let (real, link) = (home.path().join("real"), home.path().join("link"));
    fs::create_dir(&real).unwrap();
    std::os::unix::fs::symlink(&real, &link).unwrap();
    write_set(&link, &small("report.html", "x")).unwrap();
    assert!(link.symlink_metadata().unwrap().is_symlink());
    assert_eq!(fs::read_to_string(real.join("report.html")).unwrap(), "x");
}

/// Writes invented sets to look at, below the build folder.
#[test]
fn sets_of_every_size_are_written_and_can_be_looked_at() {
    for (name, count) in [("one", 2), ("usual", 137), ("far", 138), ("wide", 5601)] {
        let mut result = fixture::survey(count);
        if name == "far" {
            result.channels.iter_mut().skip(90).for_each(|channel| channel.channel_hz += 435e6);
        }
        let set = render(&result, &ALL).unwrap();
        let out = Path::new(env!("CARGO_TARGET_TMPDIR")).join("look").join(name);
        write_set(&out, &set).unwrap();
        for file in &set.files {
            assert_eq!(std::fs::metadata(out.join(&file.path)).unwrap().len(), file.bytes.len() as u64);
        }
    }
}
