//! From plan text to checked plan, with every problem at once.

use std::ops::Range;

use sha2::{Digest, Sha256};
use toml::Spanned;
use toml::de::{DeTable, DeValue};

use super::channels::{MOST_CHANNELS, MOST_DENSE_CHANNELS, group};
use super::checked::{Limits, MismatchPoints, Plan};
use super::choices::{alternatives, analysis, identity};
use super::hardware::{detector, divider, loop_filter, oscillator, reference};
use super::keys::{LISTS, SECTIONS};
use super::modulation::modulator;
use super::problem::PlanProblem;
use super::reader::{Reader, Section, describe, did_you_mean};
use super::spurs::{anchor, boundary, clock, limits, victim};
use super::tables::Load;

/// Returns the checked plan of a text; `stem` names it where it has no title; `load` reads files beside it.
///
/// # Errors
/// Every problem found, in file order.
///
/// # Examples
/// ```
/// let text = thornmap::plan::example_plan();
/// let plan = thornmap::plan::parse_plan(&text, "example", &|name| Err(format!("no file {name}"))).unwrap();
/// assert_eq!(plan.stem, "example");
/// ```
pub fn parse_plan(text: &str, stem: &str, load: Load) -> Result<Plan, Vec<PlanProblem>> {
    parse_up_to(MOST_CHANNELS, text, stem, load)
}

/// Returns the checked plan of a text that may hold up to [`MOST_DENSE_CHANNELS`] channels: for uses that enumerate none.
///
/// # Errors
/// As [`parse_plan`].
pub fn parse_dense_plan(text: &str, stem: &str, load: Load) -> Result<Plan, Vec<PlanProblem>> {
    parse_up_to(MOST_DENSE_CHANNELS, text, stem, load)
}

fn parse_up_to(most_channels: u64, text: &str, stem: &str, load: Load) -> Result<Plan, Vec<PlanProblem>> {
    let mut reader = Reader::new(text, most_channels);
    let (root, errors) = DeTable::parse_recoverable(text);
    for error in &errors {
        let span = error.span().unwrap_or(0..0);
        reader.problem("", &span, format!("not valid TOML: {}", error.message().trim()));
    }
    // After a syntax error the rest is guesswork: only what stands there is reported.
    if !errors.is_empty() {
        return Err(sorted(reader.problems));
    }
    let plan = read(&mut reader, root.get_ref(), text, stem, load);
    match plan {
        Some(plan) if reader.problems.is_empty() => Ok(plan),
        _ => Err(sorted(reader.problems)),
    }
}

fn sorted(mut problems: Vec<PlanProblem>) -> Vec<PlanProblem> {
    problems.sort_by(|a, b| a.span.start.cmp(&b.span.start).then_with(|| a.key.cmp(&b.key)));
    problems.dedup();
    problems
}

fn read(reader: &mut Reader, root: &DeTable, text: &str, stem: &str, load: Load) -> Option<Plan> {
    let end = text.len()..text.len();
    top_level(reader, root, &end);
    let section = |reader: &mut Reader, name: &'static str| one(reader, root, name, &end);
    let plan_section = section(reader, "plan");
    let identity = identity(reader, &plan_section, stem);
    let found = section(reader, "reference");
    let reference = reference(reader, &found);
    let found = section(reader, "oscillator");
    let has_tuning = found.value("tuning").is_some();
    let oscillator = oscillator(reader, &found);
    let found = section(reader, "divider");
    let divider = divider(reader, &found);
    let found = section(reader, "modulator");
    let modulator = modulator(reader, &found);
    let found = section(reader, "detector");
    let pfd_hz = reference.as_ref().and_then(|reference| reference.pfd().ok()).map(|pfd| pfd.to_f64_hz());
    let detector = detector(reader, &found, load, pfd_hz);
    let over_voltage = detector.as_ref().is_some_and(|d| matches!(d.mismatch, Some(MismatchPoints::Table(_))));
    if let Some(mismatch) = found.value("mismatch").filter(|_| over_voltage && !has_tuning) {
        let text = "a mismatch over tuning voltage needs oscillator.tuning";
        reader.problem("detector.mismatch", &mismatch.span(), text);
    }
    let found = section(reader, "loop");
    let loop_filter = loop_filter(reader, &found, load);
    let found = section(reader, "boundary");
    let edge = loop_filter.as_ref().map_or(super::checked::LoopEdge::UnityGain, |(_, edge)| *edge);
    let boundary = boundary(reader, &found, edge);
    let first_output = divider.output.first().copied().unwrap_or(1);
    let anchors: Vec<_> = many(reader, root, "anchor").iter().map(|s| anchor(reader, s, first_output)).collect();
    let victims: Vec<_> = many(reader, root, "victim").iter().map(|s| victim(reader, s)).collect();
    let clocks: Vec<_> = many(reader, root, "clock").iter().map(|s| clock(reader, s, first_output)).collect();
    let found = section(reader, "limits");
    let limits: Limits = limits(reader, &found, pfd_hz, None);
    let groups: Vec<_> = many(reader, root, "channels")
        .iter()
        .zip(1..)
        .map(|(s, number)| group(reader, s, number, (&limits, &divider.output), load))
        .collect();
    let found = section(reader, "alternatives");
    let alternatives = alternatives(reader, &found, reference.as_ref().zip(modulator.as_ref()));
    let found = section(reader, "analysis");
    let analysis = analysis(reader, &found, pfd_hz);
    let groups = groups.into_iter().collect::<Option<Vec<_>>>();
    if let Some(groups) = &groups {
        let channels: u64 = groups.iter().map(|group| group.channels.len()).sum();
        if channels > reader.most_channels {
            let text = format!("the plan has {channels} channels, at most {} are allowed", reader.most_channels);
            reader.problem("channels", &(0..0), text);
        }
        same_names(reader, groups, root);
    }
    let mut assumptions = reader.given.clone();
    assumptions.append(&mut reader.defaults.clone());
    let (loop_plan, _) = loop_filter?;
    Some(Plan {
        identity,
        reference: reference?,
        oscillator: oscillator?,
        divider,
        modulator: modulator?,
        detector: detector?,
        loop_plan,
        boundary,
        anchors: anchors.into_iter().collect::<Option<Vec<_>>>()?,
        victims: victims.into_iter().collect::<Option<Vec<_>>>()?,
        clocks: clocks.into_iter().collect::<Option<Vec<_>>>()?,
        limits,
        groups: groups?,
        alternatives,
        analysis,
        assumptions,
        required: reader.required.clone(),
        basis: reader.basis.clone(),
        warnings: reader.warnings.clone(),
        sha256: hash(text),
        stem: stem.to_owned(),
    })
}

/// Returns the SHA-256 of a text in lower-case hexadecimal.
fn hash(text: &str) -> String {
    Sha256::digest(text.as_bytes()).iter().map(|byte| format!("{byte:02x}")).collect()
}

/// Group names choose groups on the command line: two of one name would hide one.
fn same_names(reader: &mut Reader, groups: &[super::checked::ChannelGroup], root: &DeTable) {
    for (index, group) in groups.iter().enumerate() {
        if groups[..index].iter().any(|earlier| earlier.name == group.name) {
            let span = root
                .get("channels")
                .and_then(|list| list.get_ref().as_array())
                .and_then(|list| list.get(index).map(Spanned::span))
                .unwrap_or(0..0);
            let text = format!("two groups are called \"{}\"", group.name);
            reader.problem(&format!("channels[{}].name", index + 1), &span, text);
        }
    }
}

/// Checks the schema number and the names of sections.
fn top_level(reader: &mut Reader, root: &DeTable, end: &Range<usize>) {
    let section = Section { kind: "", path: String::new(), table: Some(root), span: end.clone() };
    match root.get("schema") {
        None => {
            let hint = Some("start the file with schema = 1".to_owned());
            reader.problem_with_hint("schema", &(0..0), "missing; it names the version of the plan format", hint);
        }
        Some(_) => {
            reader.whole(&section, "schema");
            reader.given.clear();
        }
    }
    let known: Vec<&str> = ["schema"]
        .into_iter()
        .chain(SECTIONS.iter().map(|(name, _)| *name))
        .chain(LISTS.iter().map(|(name, _)| *name))
        .collect();
    let mut unknown: Vec<_> = root.keys().filter(|name| !known.contains(&name.get_ref().as_ref())).collect();
    unknown.sort_by_key(|name| name.span().start);
    for name in unknown {
        let typed = name.get_ref().as_ref();
        let text = format!("unknown section; known are {}", known.join(", "));
        reader.problem_with_hint(typed, &name.span(), text, did_you_mean(typed, &known));
    }
}

/// Returns a section that stands once; an absent one is empty, and noted when the plan must hold it.
fn one<'a, 'i>(reader: &mut Reader, root: &'a DeTable<'i>, name: &'static str, end: &Range<usize>) -> Section<'a, 'i> {
    let empty = Section { kind: name, path: name.to_owned(), table: None, span: end.clone() };
    let Some(value) = root.get(name) else { return empty };
    match value.get_ref() {
        DeValue::Table(table) => {
            let section = Section { kind: name, path: name.to_owned(), table: Some(table), span: value.span() };
            reader.unknown_keys(&section);
            section
        }
        other => {
            reader.problem(name, &value.span(), format!("found {}, expected a section [{name}]", describe(other)));
            empty
        }
    }
}

/// Returns the sections of a list `[[name]]`.
fn many<'a, 'i>(reader: &mut Reader, root: &'a DeTable<'i>, name: &'static str) -> Vec<Section<'a, 'i>> {
    let is_required = LISTS.iter().any(|(list, required)| *list == name && *required);
    let Some(value) = root.get(name) else {
        if is_required {
            let hint = Some(format!("add a section [[{name}]]"));
            reader.problem_with_hint(name, &(0..0), "missing; a plan needs at least one", hint);
        } else {
            reader.default(name.to_owned(), "none");
        }
        return Vec::new();
    };
    let Some(list) = value.get_ref().as_array() else {
        let hint = Some(format!("write it with two brackets: [[{name}]]"));
        let text = format!("found {}, expected a list of sections [[{name}]]", describe(value.get_ref()));
        reader.problem_with_hint(name, &value.span(), text, hint);
        return Vec::new();
    };
    if list.is_empty() && is_required {
        reader.problem(name, &value.span(), "an empty list; a plan needs at least one");
    }
    let mut sections = Vec::new();
    for (item, number) in list.iter().zip(1..) {
        let path = format!("{name}[{number}]");
        match item.get_ref().as_table() {
            Some(table) => {
                let section = Section { kind: name, path, table: Some(table), span: item.span() };
                reader.unknown_keys(&section);
                sections.push(section);
            }
            None => {
                reader.problem(&path, &item.span(), format!("found {}, expected a section", describe(item.get_ref())))
            }
        }
    }
    sections
}
