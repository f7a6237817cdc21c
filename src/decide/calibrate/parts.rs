//! The parts of every measured tone as voltages, under moved figures, and how each part answers to them.

use super::parameters::{Coupling, Moves, Parameter, factor, moved};
use super::rows::Spot;
use crate::assess::{AssessError, Contributions, Setup};
use crate::base::{db_from_power, power_from_db};
use crate::plan::{Measured, Plan};

/// Level that mutes a coupling \[dBc\].
const MUTE_DBC: f64 = -500.0;
/// Step by which the answer to the offset current and to a roll-off is found \[dB\].
const STEP_DB: f64 = 0.1;

/// Parts of one row's tone as voltages against the carrier.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Parts {
    /// Row in the table.
    pub row: usize,
    /// By coupling.
    pub coupling: Vec<f64>,
    /// How each coupling's part moves with its roll-off \[dB a dB\].
    pub roll_off_slope: Vec<f64>,
    /// Part of the detector's nonlinearity.
    pub nonlinearity: f64,
    /// How it moves with the offset current \[dB a dB\].
    pub offset_slope: f64,
    /// Every other part.
    pub rest: f64,
    pub measured_dbc: f64,
    pub is_bound: bool,
}

impl Parts {
    /// Returns the part that a figure acts on, and how many decibels it moves for one of the figure.
    pub fn acted(&self, parameter: Parameter) -> (f64, f64) {
        match parameter {
            Parameter::Level(i) => (self.coupling[i], 1.0),
            Parameter::RollOff(i) => (self.coupling[i], self.roll_off_slope[i]),
            Parameter::Mismatch => (self.nonlinearity, 1.0),
            Parameter::OffsetCurrent => (self.nonlinearity, self.offset_slope),
        }
    }

    /// Returns d(level)/d(figure) \[dB a dB\]: the share of the part times its own slope.
    pub fn share(&self, parameter: Parameter) -> f64 {
        let (volts, slope) = self.acted(parameter);
        volts * slope / (self.coupling.iter().sum::<f64>() + self.nonlinearity + self.rest)
    }

    /// Returns the tone with its parts moved further \[dBc\], and d(level)/d(figure) of each chosen figure.
    pub fn level(&self, chosen: &[Parameter], by_db: &[f64]) -> (f64, Vec<f64>) {
        let mut moved = self.clone();
        for (parameter, db) in chosen.iter().zip(by_db) {
            let (_, slope) = self.acted(*parameter);
            match parameter {
                Parameter::Level(i) | Parameter::RollOff(i) => moved.coupling[*i] *= factor(slope * db),
                Parameter::Mismatch | Parameter::OffsetCurrent => moved.nonlinearity *= factor(slope * db),
            }
        }
        let volts = moved.rest + moved.nonlinearity + moved.coupling.iter().sum::<f64>();
        (db_from_power(volts * volts), chosen.iter().map(|parameter| moved.share(*parameter)).collect())
    }
}

fn volts(level_dbc: Option<f64>) -> f64 {
    level_dbc.map_or(0.0, |level| power_from_db(level).sqrt())
}

/// Returns the decibels between two voltages over a step; nothing where either vanishes.
fn slope(low: f64, high: f64, step_db: f64) -> f64 {
    if low > 0.0 && high > 0.0 { db_from_power((high / low).powi(2)) / step_db } else { 0.0 }
}

/// Parts of one plan's tones at the spots, in their order; a tone that is not there has none.
fn at_spots(plan: &Plan, spots: &[Spot]) -> Result<Vec<Option<Contributions>>, AssessError> {
    let setup = Setup::new(plan)?;
    let mut scratch = setup.scratch();
    let mut last = None;
    spots
        .iter()
        .map(|spot| {
            let key = (spot.group, spot.place, spot.channel);
            // Rows of one channel stand together as a rule: it is assessed once for them.
            if last.as_ref().is_none_or(|(known, _)| *known != key) {
                last = Some((key, setup.assess(spot.group, spot.place, spot.channel, &mut scratch)?));
            }
            let tones = last.iter().flat_map(|(_, result)| &result.tones);
            Ok(tones
                .filter(|tone| (tone.offset_hz - spot.offset_hz).abs() < 1e-6)
                .map(|tone| tone.contributions.clone())
                .next())
        })
        .collect()
}

/// Returns the parts of every used row under moved figures.
///
/// # Errors
/// As the assessment of the channels.
pub(super) fn parts(
    plan: &Plan,
    couplings: &[Coupling],
    moves: &Moves,
    spots: &[(usize, Spot)],
    measured: &[Measured],
) -> Result<Vec<Parts>, AssessError> {
    let places: Vec<Spot> = spots.iter().map(|(_, spot)| *spot).collect();
    let here = moved(plan, couplings, moves);
    let whole = at_spots(&here, &places)?;
    let of = |found: &[Option<Contributions>], part: fn(&Contributions) -> Option<f64>| -> Vec<f64> {
        found.iter().map(|parts| volts(parts.as_ref().and_then(part))).collect()
    };
    let coupled = |moves: &Moves, i: usize| -> Result<Vec<f64>, AssessError> {
        let mut alone = moved(plan, couplings, moves);
        for (_, other) in couplings.iter().enumerate().filter(|(j, _)| *j != i) {
            for (place, _) in &other.anchors {
                alone.anchors[*place].level_dbc = MUTE_DBC;
            }
        }
        Ok(of(&at_spots(&alone, &places)?, |c| c.coupling_dbc))
    };
    let mut coupling = Vec::new();
    let mut rolled = Vec::new();
    for i in 0..couplings.len() {
        coupling.push(if couplings.len() == 1 { of(&whole, |c| c.coupling_dbc) } else { coupled(moves, i)? });
        let mut steeper = moves.clone();
        steeper.roll_off_db[i] += STEP_DB;
        rolled.push(coupled(&steeper, i)?);
    }
    let stepped = if plan.detector.offset_current_a == 0.0 {
        None
    } else {
        let at = |db: f64| {
            let stepped = Moves { offset_db: moves.offset_db + db, ..moves.clone() };
            at_spots(&moved(plan, couplings, &stepped), &places).map(|found| of(&found, |c| c.nonlinearity_dbc))
        };
        Some((at(-STEP_DB)?, at(STEP_DB)?))
    };
    let nonlinearity = of(&whole, |c| c.nonlinearity_dbc);
    let rest: Vec<[f64; 3]> = whole
        .iter()
        .map(|parts| parts.as_ref().map_or([0.0; 3], |c| [c.modulator_dbc, c.leakage_dbc, c.clock_dbc].map(volts)))
        .collect();
    Ok(spots
        .iter()
        .enumerate()
        .map(|(i, (row, _))| Parts {
            row: *row,
            coupling: coupling.iter().map(|c| c[i]).collect(),
            roll_off_slope: coupling.iter().zip(&rolled).map(|(c, steep)| slope(c[i], steep[i], STEP_DB)).collect(),
            nonlinearity: nonlinearity[i],
            offset_slope: stepped.as_ref().map_or(0.0, |(low, high)| slope(low[i], high[i], 2.0 * STEP_DB)),
            rest: rest[i].iter().sum(),
            measured_dbc: measured[*row].level_dbc,
            is_bound: measured[*row].is_bound,
        })
        .collect())
}
