//! Properties: exact values go through unchanged, bounds of the key table hold, no text breaks the reader.

use proptest::prelude::*;
use thornmap::base::{Exact, Frequency};
use thornmap::plan::example_plan;
use thornmap::plan::keys::{KEYS, Kind, SECTIONS};

use super::{PLAIN, changed, read, valid};

proptest! {
    #![proptest_config(ProptestConfig { cases: 200, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn a_fraction_of_hertz_comes_back_as_written(top in 1i128..1_000_000_000_000, bottom in 1i128..1_000_000) {
        let plan = valid(&changed("frequency = \"20 MHz\"", &format!("frequency = \"{top}/{bottom} Hz\"")));
        let want = Frequency::from_hz(Exact::new(top, bottom).unwrap());
        prop_assert_eq!(plan.reference.frequency, want);
        // And from its own text again.
        let again = valid(&changed("frequency = \"20 MHz\"", &format!("frequency = \"{want}\"")));
        prop_assert_eq!(again.reference.frequency, want);
    }

    #[test]
    fn every_raster_ends_on_its_last_channel(first in 1i128..1_000_000, count in 1i128..100_000, top in 1i128..50_000, bottom in 1i128..97) {
        let spacing = Exact::new(top, bottom).unwrap();
        let first = Exact::from_integer(first);
        let last = first.plus(&spacing.times(&Exact::from_integer(count - 1)).unwrap()).unwrap();
        let raster = format!("first = \"{first} Hz\"\nlast = \"{last} Hz\"\nspacing = \"{spacing} Hz\"");
        let plan = valid(&changed("first = \"430 MHz\"\nlast = \"431 MHz\"\nspacing = \"25 kHz\"", &raster));
        let channels = &plan.groups[0].channels;
        prop_assert_eq!(i128::from(channels.len()), count);
        prop_assert_eq!(channels.get(channels.len() - 1), Some(Frequency::from_hz(last)));
        prop_assert!(plan.warnings.is_empty());
        prop_assert_eq!(plan.locate(Frequency::from_hz(last), None), Some((0, Some(channels.len() - 1))));
    }

    #[test]
    fn no_damage_to_a_plan_breaks_the_reader(at in 0usize..6_000, cut in 0usize..40, put in "[\\PC\n\"\\[\\]{}=.,]{0,12}") {
        let text = example_plan();
        let edge = |at: usize| (0..=at.min(text.len())).rev().find(|at| text.is_char_boundary(*at)).unwrap_or(0);
        let (from, to) = (edge(at), edge((at + cut).max(at)));
        let damaged = format!("{}{put}{}", &text[..from], &text[to..]);
        if let Err(problems) = read(&damaged) {
            prop_assert!(!problems.is_empty());
            let lines = damaged.matches('\n').count() + 1;
            for problem in &problems {
                prop_assert!((1..=lines).contains(&problem.line) && problem.column >= 1 && !problem.text.is_empty());
            }
            let _ = thornmap::plan::render_problems(&problems, "x", &damaged, thornmap::plan::Colour::Plain);
        }
    }
}

/// Returns a plan with one key of a section set; the section is made or extended.
fn with(section: &str, name: &str, value: &str) -> String {
    let mut text = String::new();
    let head = format!("[{section}]");
    let mut is_set = false;
    let mut inside = false;
    for line in PLAIN.lines() {
        if line.starts_with('[') {
            inside = line == head;
        }
        if inside && line.split(" =").next() == Some(name) {
            continue;
        }
        text.push_str(&format!("{line}\n"));
        if line == head {
            text.push_str(&format!("{name} = {value}\n"));
            is_set = true;
        }
    }
    if !is_set {
        text.push_str(&format!("{head}\n{name} = {value}\n"));
    }
    text
}

#[test]
fn whole_numbers_are_held_to_the_bounds_of_the_key_table() {
    let mut runs = 0;
    for key in KEYS.iter().filter(|key| SECTIONS.iter().any(|(name, _)| *name == key.section)) {
        let (least, most, list) = match key.kind {
            Kind::Whole(least, most) => (least, most, false),
            Kind::Wholes(least, most) => (least, most, true),
            _ => continue,
        };
        let path = format!("{}.{}", key.section, key.name);
        let mut said = |number: i128| {
            let value = if list { format!("[{number}]") } else { number.to_string() };
            let problems = read(&with(key.section, key.name, &value)).err().unwrap_or_default();
            runs += 1;
            problems.iter().any(|problem| problem.key == path && problem.text.contains("whole number from"))
        };
        for outside in [i128::from(least) - 1, i128::from(most) + 1] {
            assert!(said(outside), "{path} = {outside} is accepted");
        }
        for inside in [least, most] {
            assert!(!said(i128::from(inside)), "{path} = {inside} is refused");
        }
    }
    assert!(runs >= 40, "{runs}");
}

#[test]
fn quantities_refuse_a_missing_and_a_foreign_unit_by_the_key_table() {
    let mut runs = 0;
    for key in KEYS.iter().filter(|key| SECTIONS.iter().any(|(name, _)| *name == key.section)) {
        let Kind::Quantity(dimension, _) = key.kind else { continue };
        let path = format!("{}.{}", key.section, key.name);
        for value in ["\"3\"", "3", "\"3 parsec\"", "\"three\"", "[1]", "{ value = \"3\" }"] {
            let problems = read(&with(key.section, key.name, value)).err().unwrap_or_default();
            let told = problems.iter().find(|problem| problem.key == path);
            assert!(told.is_some(), "{path} = {value} is accepted");
            if !value.contains("three") {
                assert!(told.is_some_and(|p| p.text.contains(dimension.accepted())), "{path} = {value}: {told:?}");
            }
            runs += 1;
        }
    }
    assert!(runs >= 100, "{runs}");
}
