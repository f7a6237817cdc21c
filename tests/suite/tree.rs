//! The shape of the tree: one line of stages, engines that know nothing of files, files that stay readable.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

/// The stages in order; a stage may use only those before it.
const STAGES: [&str; 12] = [
    "base",
    "modulator",
    "spectrum",
    "loop_model",
    "tones",
    "plan",
    "assess",
    "survey",
    "decide",
    "report",
    "explore",
    "cli",
];

/// Crates (and parts of std) that only these stages may name.
const RESERVED: [(&str, &[&str]); 8] = [
    ("rustfft", &["spectrum"]),
    ("realfft", &["spectrum"]),
    ("toml::", &["plan"]),
    ("clap", &["cli"]),
    ("plotters", &["report"]),
    ("askama", &["report"]),
    ("std::fs", &["plan", "report", "cli"]),
    ("std::env::var", &["cli"]),
];

/// Longest file and longest function, in lines.
const LONGEST_FILE: usize = 600;
const LONGEST_FUNCTION: usize = 80;

/// Names that say nothing of what a file produces.
const EMPTY_NAMES: [&str; 5] = ["utils", "util", "helpers", "common", "misc"];

fn root() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR"))
}

/// Returns every Rust file below a folder with its text, sorted by path.
fn sources(folder: &Path) -> BTreeMap<PathBuf, String> {
    let mut found = BTreeMap::new();
    let mut folders = vec![folder.to_owned()];
    while let Some(folder) = folders.pop() {
        for entry in fs::read_dir(&folder).unwrap() {
            let path = entry.unwrap().path();
            if path.is_dir() {
                folders.push(path);
            } else if path.extension().is_some_and(|extension| extension == "rs") {
                let text = fs::read_to_string(&path).unwrap();
                found.insert(path, text);
            }
        }
    }
    found
}

/// Returns the stage of a file below `src`, or `None` for lib.rs and main.rs.
fn stage_of(path: &Path) -> Option<usize> {
    let inside = path.strip_prefix(root().join("src")).ok()?;
    let first = inside.components().next()?.as_os_str().to_str()?.to_owned();
    STAGES.iter().position(|stage| *stage == first.trim_end_matches(".rs"))
}

/// Returns the code of a file: comments (with their examples) left out.
fn code(text: &str) -> impl Iterator<Item = (usize, &str)> {
    text.lines().enumerate().map(|(i, line)| (i + 1, line)).filter(|(_, line)| !line.trim_start().starts_with("//"))
}

/// Returns what a stage's code names that it must not.
fn stage_faults(stage: usize, text: &str) -> Vec<String> {
    let mut faults = Vec::new();
    for (line, content) in code(text) {
        for (later, name) in STAGES.iter().enumerate() {
            if later > stage
                && (content.contains(&format!("crate::{name}")) || content.contains(&format!("thornmap::{name}")))
            {
                faults.push(format!("line {line}: {} uses the later stage {name}", STAGES[stage]));
            }
        }
        for (name, allowed) in RESERVED {
            let named = content.contains(&format!("use {name}"))
                || content.contains(&format!("{name}::"))
                || (name.contains("::") && content.contains(name));
            if named && !allowed.contains(&STAGES[stage]) {
                faults.push(format!("line {line}: {} names {name}", STAGES[stage]));
            }
        }
    }
    faults
}

/// Returns the functions of rustfmt-formatted code that are too long: from `fn` to the brace at the same indent.
fn long_functions(text: &str) -> Vec<String> {
    let lines: Vec<&str> = text.lines().collect();
    let mut faults = Vec::new();
    for (start, line) in lines.iter().enumerate() {
        let trimmed = line.trim_start();
        let is_function = ["fn ", "pub fn ", "pub(super) fn ", "pub(crate) fn ", "const fn ", "pub const fn "]
            .iter()
            .any(|head| trimmed.starts_with(head));
        if !is_function {
            continue;
        }
        let close = format!("{}}}", &line[..line.len() - trimmed.len()]);
        let end = lines[start..].iter().position(|line| *line == close).unwrap_or(0);
        if end + 1 > LONGEST_FUNCTION {
            faults.push(format!("line {}: {} lines: {trimmed}", start + 1, end + 1));
        }
    }
    faults
}

#[test]
fn stages_use_only_earlier_stages_and_their_own_crates() {
    let mut checked = 0;
    let mut faults = Vec::new();
    for (path, text) in sources(&root().join("src")) {
        let Some(stage) = stage_of(&path) else { continue };
        faults.extend(stage_faults(stage, &text).into_iter().map(|fault| format!("{}: {fault}", path.display())));
        checked += 1;
    }
    assert!(faults.is_empty(), "{}", faults.join("\n"));
    assert!(checked >= 60, "only {checked} files were checked");
}

#[test]
fn the_check_itself_can_fail() {
    assert_eq!(stage_faults(0, "use crate::plan::Plan;\n").len(), 1);
    assert_eq!(stage_faults(2, "let file = std::fs::read(path);\n").len(), 1);
    assert_eq!(stage_faults(4, "use rustfft::FftPlanner;\n").len(), 1);
    assert!(stage_faults(2, "// use crate::plan::Plan;\n").is_empty());
    assert!(stage_faults(6, "use crate::plan::Plan;\n").is_empty());
    let long = format!("fn long() {{\n{}}}\n", "    step();\n".repeat(LONGEST_FUNCTION));
    assert_eq!(long_functions(&long).len(), 1);
    assert!(long_functions("fn short() {\n    step();\n}\n").is_empty());
}

#[test]
fn files_and_functions_stay_readable() {
    let mut faults = Vec::new();
    for folder in ["src", "tests", "benches"] {
        for (path, text) in sources(&root().join(folder)) {
            let lines = text.lines().count();
            if lines > LONGEST_FILE {
                faults.push(format!("{}: {lines} lines", path.display()));
            }
            let stem = path.file_stem().unwrap().to_str().unwrap().to_owned();
            if EMPTY_NAMES.contains(&stem.as_str()) {
                faults.push(format!("{}: a name that says nothing", path.display()));
            }
            if folder == "src" {
                faults.extend(long_functions(&text).into_iter().map(|fault| format!("{}: {fault}", path.display())));
            }
        }
    }
    assert!(faults.is_empty(), "{}", faults.join("\n"));
}

#[test]
fn every_dependency_says_why() {
    let manifest = fs::read_to_string(root().join("Cargo.toml")).unwrap();
    let mut inside = false;
    let mut count = 0;
    for line in manifest.lines() {
        if line.starts_with('[') {
            inside = line.contains("dependencies]");
        } else if inside && line.contains('=') {
            assert!(line.contains(" # "), "no reason: {line}");
            count += 1;
        }
    }
    assert!(count >= 25, "{count} dependencies");
}

#[test]
fn texts_speak_of_the_program_alone() {
    // Built in pieces, so that this file does not contain them.
    let forbidden =
        [["/wor", "k/"].concat(), ["/ro", "ot/"].concat(), ["sub", "agent"].concat(), ["seed doc", "ument"].concat()];
    let mut faults = Vec::new();
    let mut checked = 0;
    for folder in ["src", "tests", "configs", "benches", ".ci"] {
        let mut folders = vec![root().join(folder)];
        while let Some(folder) = folders.pop() {
            for entry in fs::read_dir(&folder).unwrap() {
                let path = entry.unwrap().path();
                if path.is_dir() {
                    folders.push(path);
                } else if let Ok(text) = fs::read_to_string(&path) {
                    checked += 1;
                    faults.extend(
                        forbidden
                            .iter()
                            .filter(|word| text.contains(*word))
                            .map(|word| format!("{}: {word}", path.display())),
                    );
                }
            }
        }
    }
    assert!(faults.is_empty(), "{}", faults.join("\n"));
    assert!(checked > 80, "only {checked} files were read");
}
