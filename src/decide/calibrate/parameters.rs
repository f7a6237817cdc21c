//! What a calibration may move: couplings, mismatch and offset current, and the plan that has them moved.

use super::{FittedFigure, PlacedFigure};
use crate::assess::Setup;
use crate::base::power_from_db;
use crate::plan::{MismatchPoints, Place, Plan};
use crate::tones::{AnchorLevel, Mechanism};

/// One figure that may be fitted; couplings are counted from 0.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Parameter {
    /// Level of a coupling, as a shift \[dB\].
    Level(usize),
    /// Roll-off of a coupling \[dB a harmonic\], as a shift.
    RollOff(usize),
    /// Mismatch, as a factor \[dB\].
    Mismatch,
    /// Offset current, as a factor \[dB\].
    OffsetCurrent,
}

/// Anchors of one path and q: one coupling, with one level and one roll-off.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Coupling {
    pub mechanism: Mechanism,
    pub q: u64,
    /// Places in the plan's list, with what the coupling as a whole gives where each was taken \[dBc\].
    pub anchors: Vec<(usize, f64)>,
    /// Level of the whole, where the first anchor was taken \[dBc\].
    pub level_dbc: f64,
    /// Roll-off of the whole \[dB a harmonic\].
    pub roll_off_db: f64,
}

/// How far each figure was moved from the plan.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Moves {
    pub level_db: Vec<f64>,
    pub roll_off_db: Vec<f64>,
    pub mismatch_db: f64,
    pub offset_db: f64,
}

impl Moves {
    pub fn none(couplings: usize) -> Moves {
        Moves { level_db: vec![0.0; couplings], roll_off_db: vec![0.0; couplings], mismatch_db: 0.0, offset_db: 0.0 }
    }

    pub fn of(&mut self, parameter: Parameter) -> &mut f64 {
        match parameter {
            Parameter::Level(i) => &mut self.level_db[i],
            Parameter::RollOff(i) => &mut self.roll_off_db[i],
            Parameter::Mismatch => &mut self.mismatch_db,
            Parameter::OffsetCurrent => &mut self.offset_db,
        }
    }
}

/// Returns the couplings of a plan.
pub(super) fn couplings(setup: &Setup) -> Vec<Coupling> {
    setup
        .anchors()
        .iter()
        .map(|whole| Coupling {
            mechanism: whole.mechanism,
            q: whole.q,
            anchors: setup
                .carried_anchors()
                .iter()
                .enumerate()
                .filter_map(|(i, a)| Some((i, at(whole, a.as_ref()?)?)))
                .collect(),
            level_dbc: whole.level_dbc,
            roll_off_db: whole.roll_off_db,
        })
        .collect()
}

/// Returns what a coupling gives where one of its anchors was taken \[dBc\]; `None` for an anchor of another coupling.
fn at(whole: &AnchorLevel, anchor: &AnchorLevel) -> Option<f64> {
    let is_same = anchor.mechanism == whole.mechanism && anchor.q == whole.q;
    if is_same { whole.level_dbc_at(1, &anchor.taken_at) } else { None }
}

/// Returns the factor of a number of decibels on a voltage.
pub(super) fn factor(db: f64) -> f64 {
    power_from_db(db).sqrt()
}

/// Returns the plan with its figures moved; anchors of one coupling agree in it.
pub(super) fn moved(plan: &Plan, couplings: &[Coupling], moves: &Moves) -> Plan {
    let mut plan = plan.clone();
    for (i, coupling) in couplings.iter().enumerate() {
        for (place, level_dbc) in &coupling.anchors {
            plan.anchors[*place].level_dbc = level_dbc + moves.level_db[i];
            plan.anchors[*place].roll_off_db = coupling.roll_off_db + moves.roll_off_db[i];
        }
    }
    if let Some(MismatchPoints::Constant(value)) = &mut plan.detector.mismatch {
        *value *= factor(moves.mismatch_db);
    }
    plan.detector.offset_current_a *= factor(moves.offset_db);
    plan
}

/// Returns the mismatch of a plan where it is one value other than zero.
pub(super) fn single_mismatch(plan: &Plan) -> Option<f64> {
    match &plan.detector.mismatch {
        Some(MismatchPoints::Constant(value)) if *value != 0.0 => Some(*value),
        _ => None,
    }
}

/// Returns the name of a parameter.
pub(super) fn name(couplings: &[Coupling], parameter: Parameter) -> String {
    let anchors = |i: usize| {
        let numbers: Vec<String> = couplings[i].anchors.iter().map(|(place, _)| (place + 1).to_string()).collect();
        match numbers.as_slice() {
            [one] => format!("anchor {one}"),
            _ => format!("anchors {} as one coupling,", numbers.join(", ")),
        }
    };
    match parameter {
        Parameter::Level(i) => format!("{} level", anchors(i)),
        Parameter::RollOff(i) => format!("{} roll-off", anchors(i)),
        Parameter::Mismatch => "detector.mismatch".to_owned(),
        Parameter::OffsetCurrent => "detector.offset_current".to_owned(),
    }
}

/// Returns a fitted figure: `shift` and half width in decibels.
pub(super) fn figure(
    plan: &Plan,
    couplings: &[Coupling],
    parameter: Parameter,
    (shift, half): (f64, f64),
) -> FittedFigure {
    let anchors = |i: usize| couplings[i].anchors.iter();
    let (unit, planned, places): (_, f64, Vec<(Place, f64)>) = match parameter {
        Parameter::Level(i) => {
            ("dBc", couplings[i].level_dbc, anchors(i).map(|(at, level)| (Place::AnchorLevel(*at), *level)).collect())
        }
        Parameter::RollOff(i) => {
            let planned = couplings[i].roll_off_db;
            ("dB", planned, anchors(i).map(|(at, _)| (Place::AnchorRollOff(*at), planned)).collect())
        }
        Parameter::Mismatch => {
            let planned = single_mismatch(plan).unwrap_or(0.0);
            ("ratio", planned, vec![(Place::Mismatch, planned)])
        }
        Parameter::OffsetCurrent => {
            let planned = plan.detector.offset_current_a;
            ("A", planned, vec![(Place::OffsetCurrent, planned)])
        }
    };
    let moved = |planned: f64, db: f64| match parameter {
        Parameter::Level(_) | Parameter::RollOff(_) => planned + db,
        Parameter::Mismatch | Parameter::OffsetCurrent => planned * factor(db),
    };
    let around = |planned: f64| {
        let [value, a, b] = [shift, shift - half, shift + half].map(|db| moved(planned, db));
        (value, (a.min(b), a.max(b)))
    };
    let (fitted, interval) = around(planned);
    let places = places
        .into_iter()
        .map(|(place, planned)| {
            let (value, interval) = around(planned);
            PlacedFigure { place, value, interval }
        })
        .collect();
    FittedFigure { key: name(couplings, parameter), places, planned, fitted, interval, unit, covered: Vec::new() }
}
