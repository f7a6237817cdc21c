//! Every verdict rule alone, in every pair, and at its inclusive edges.

use thornmap::assess::{Contributions, Evidence, Illegal, MaskState, Origin, Rule, Tone, Verdict, judge};
use thornmap::base::Basis;

const MARGIN_DB: f64 = 6.0;
const PHASE_LIMIT_DEG: f64 = 2.0;

/// What a rule needs in order to fire.
#[derive(Clone, Default)]
struct Case {
    illegal: Vec<Illegal>,
    tones: Vec<Tone>,
    phase: Option<(Option<f64>, Option<f64>)>,
}

fn tone(level_dbc: Option<f64>, limit_dbc: Option<f64>) -> Tone {
    Tone {
        origin: Origin::Boundary,
        label: "1/1 boundary".to_owned(),
        harmonic: Some(1),
        offset_hz: 20_000.0,
        level_dbc,
        level_uncertainty_db: None,
        known_level_dbc: level_dbc,
        basis: Basis::Assumed,
        p: Some(90),
        q: Some(1),
        contributions: Contributions::default(),
        limit_dbc,
        margin_db: level_dbc.zip(limit_dbc).map(|(level, limit)| limit - level),
        inside_loop: true,
        inside_guard: true,
        after_loop: false,
        family_known: true,
        residue: Some(7),
        victims: Vec::new(),
        unknown: if level_dbc.is_none() { vec!["coupling: no anchor".to_owned()] } else { Vec::new() },
    }
}

fn illegal() -> Illegal {
    Illegal {
        limit: "oscillator range, upper end".to_owned(),
        value: 1.86e9,
        bound: 1.85e9,
        missed_by: 1e7,
        unit: "Hz",
    }
}

/// Returns a case in which `rule` and no other rule fires.
fn firing(rule: Rule) -> Case {
    let tones = |tone| Case { tones: vec![tone], ..Case::default() };
    let phase = |all, known| Case { phase: Some((all, known)), ..Case::default() };
    match rule {
        Rule::B1 => Case { illegal: vec![illegal()], ..Case::default() },
        Rule::B2 => tones(tone(Some(-50.0), Some(-60.0))),
        Rule::B3 => tones(tone(None, Some(-60.0))),
        Rule::B4 => phase(Some(2.1), Some(2.1)),
        Rule::M1 => tones(tone(Some(-63.0), Some(-60.0))),
        Rule::M2 => tones(Tone { inside_guard: false, ..tone(None, Some(-60.0)) }),
        Rule::M3 => tones(tone(Some(-80.0), Some(-60.0))),
        Rule::M4 => phase(Some(1.5), Some(1.5)),
        Rule::M5 => phase(None, Some(1.0)),
    }
}

fn verdict(case: &Case, mask: MaskState) -> (Verdict, Vec<Rule>) {
    let (verdict, reasons) = judge(&Evidence {
        illegal: &case.illegal,
        word: Some((7, 1000)),
        tones: &case.tones,
        harmonics: 5,
        mask,
        margin_db: MARGIN_DB,
        phase_limit_deg: case.phase.map(|_| PHASE_LIMIT_DEG),
        phase_error_deg: case.phase.and_then(|(all, _)| all),
        phase_error_known_deg: case.phase.and_then(|(_, known)| known),
    });
    assert!(reasons.iter().all(|reason| !reason.text.is_empty()));
    (verdict, reasons.iter().map(|reason| reason.rule).collect())
}

#[test]
fn each_rule_fires_alone_and_gives_its_state() {
    for rule in Rule::ALL {
        let (state, fired) = verdict(&firing(rule), MaskState::Given);
        assert_eq!(fired, [rule]);
        assert_eq!(state, rule.verdict());
    }
}

#[test]
fn every_pair_gives_the_worse_state_and_both_reasons() {
    let phase_rules = [Rule::B4, Rule::M4, Rule::M5];
    let mut pairs = 0;
    for (i, a) in Rule::ALL.into_iter().enumerate() {
        for b in Rule::ALL.into_iter().skip(i + 1) {
            // One phase error has one state: these three exclude each other.
            if phase_rules.contains(&a) && phase_rules.contains(&b) {
                continue;
            }
            let (first, second) = (firing(a), firing(b));
            let both = Case {
                illegal: [first.illegal, second.illegal].concat(),
                tones: [first.tones, second.tones].concat(),
                phase: first.phase.or(second.phase),
            };
            let (state, fired) = verdict(&both, MaskState::Given);
            assert_eq!(fired, [a.min(b), a.max(b)], "{a:?} with {b:?}");
            assert_eq!(state, a.verdict().max(b.verdict()), "{a:?} with {b:?}");
            pairs += 1;
        }
    }
    assert_eq!(pairs, 9 * 8 / 2 - 3);
}

#[test]
fn nothing_known_against_the_channel_is_clear() {
    let far = Tone { inside_loop: false, inside_guard: false, ..tone(None, Some(-60.0)) };
    let quiet = Tone { inside_loop: false, inside_guard: false, ..tone(Some(-90.0), Some(-60.0)) };
    let case = Case { tones: vec![far, quiet], phase: Some((Some(0.5), Some(0.5))), ..Case::default() };
    assert_eq!(verdict(&case, MaskState::Given), (Verdict::Clear, Vec::new()));
}

#[test]
fn edges_are_inclusive() {
    let one = |tone: Tone| verdict(&Case { tones: vec![tone], ..Case::default() }, MaskState::Given).1;
    // Level = limit passes, and is within the margin; the margin itself is still marginal.
    assert_eq!(one(tone(Some(-60.0), Some(-60.0))), [Rule::M1]);
    assert_eq!(one(tone(Some(-60.001), Some(-60.001 + MARGIN_DB))), [Rule::M1]);
    assert_eq!(one(tone(Some(-66.01), Some(-60.0))), [Rule::M3]);
    let phase = |error| verdict(&Case { phase: Some((Some(error), None)), ..Case::default() }, MaskState::Given).1;
    assert_eq!(phase(PHASE_LIMIT_DEG), [Rule::M4]);
    let least = PHASE_LIMIT_DEG * 10f64.powf(-MARGIN_DB / 20.0);
    assert_eq!(phase(least * 1.000_001), [Rule::M4]);
    assert!(phase(least * 0.999_999).is_empty());
}

#[test]
fn a_known_part_above_the_limit_is_enough() {
    let partly = Tone {
        level_dbc: None,
        known_level_dbc: Some(-55.0),
        margin_db: Some(-5.0),
        inside_guard: false,
        inside_loop: false,
        ..tone(None, Some(-60.0))
    };
    let case = Case { tones: vec![partly], phase: Some((None, Some(2.5))), ..Case::default() };
    assert_eq!(verdict(&case, MaskState::Given), (Verdict::Bad, vec![Rule::B2, Rule::B4]));
}

#[test]
fn without_a_mask_position_alone_decides() {
    let one = |tone: Tone| verdict(&Case { tones: vec![tone], ..Case::default() }, MaskState::Absent).1;
    assert_eq!(one(tone(Some(-119.0), None)), [Rule::B2]);
    assert!(one(Tone { inside_loop: false, ..tone(Some(-20.0), None) }).is_empty());
    assert!(one(Tone { origin: Origin::SubFractional, harmonic: None, ..tone(Some(-50.0), None) }).is_empty());
    assert_eq!(one(Tone { origin: Origin::Clock, ..tone(Some(-50.0), None) }), [Rule::M3]);
}

#[test]
fn tones_made_after_the_loop_are_at_most_marginal_when_unknown() {
    let after = Tone { after_loop: true, ..tone(None, Some(-60.0)) };
    let case = Case { tones: vec![after], ..Case::default() };
    assert_eq!(verdict(&case, MaskState::Given), (Verdict::Marginal, vec![Rule::M2]));
}

#[test]
fn only_low_harmonics_of_the_named_families_count_inside_the_loop() {
    let one = |tone: Tone| verdict(&Case { tones: vec![tone], ..Case::default() }, MaskState::Given).1;
    let quiet = tone(Some(-90.0), Some(-60.0));
    assert_eq!(one(Tone { harmonic: Some(5), ..quiet.clone() }), [Rule::M3]);
    assert!(one(Tone { harmonic: Some(6), ..quiet.clone() }).is_empty());
    assert!(one(Tone { origin: Origin::Reference, ..quiet.clone() }).is_empty());
    assert!(one(Tone { origin: Origin::SubFractional, harmonic: None, ..quiet }).is_empty());
}
