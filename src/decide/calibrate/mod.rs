//! Measured tones fed back: predicted against measured; couplings, mismatch and offset current fitted with intervals.

mod parameters;
mod parts;
mod rows;
mod solve;

use serde::Serialize;

use crate::assess::{AssessError, Setup};
use crate::base::Frequency;
use crate::plan::{Measured, Place, Plan};

use parameters::{Coupling, Moves, Parameter, couplings, figure, name, single_mismatch};
use parts::{Parts, parts};
use rows::{Covered, Found, by_mechanism, shown, tone_of};
use solve::fitted;

/// Share of a tone's voltage from which a row tells anything of a figure.
const LEAST_SHARE: f64 = 0.05;
/// The same for a roll-off: harmonics in which the coupling only whispers would make it up.
const LEAST_ROLL_OFF_SHARE: f64 = 0.3;
/// Two figures whose rows are this much alike cannot be told apart.
const ALIKE: f64 = 0.995;
/// Rounds of assessing the channels afresh where the figures have come to.
const MOST_ROUNDS: usize = 20;
/// Longest move of the offset current in one round \[dB\]: a tone near the kink answers to it in no straight line.
const LONGEST_OFFSET_MOVE_DB: f64 = 0.5;
/// Move below which a round ends the search \[dB\].
const SETTLED_DB: f64 = 0.002;

/// One measured row beside the prediction.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct CalibratedRow {
    /// Line in the table.
    pub line: usize,
    /// Channel.
    #[serde(rename = "channel_exact")]
    pub channel: Frequency,
    /// Offset measured \[Hz\].
    pub offset_hz: f64,
    /// Level measured \[dBc\].
    pub measured_dbc: f64,
    /// Whether it is an upper bound.
    pub is_bound: bool,
    /// The tone it is.
    pub label: Option<String>,
    /// Level predicted by the plan, known parts \[dBc\].
    pub predicted_dbc: Option<f64>,
    /// Level after the fit \[dBc\].
    pub fitted_dbc: Option<f64>,
    /// Measured minus predicted \[dB\]; for a bound only where the prediction is above it.
    pub residual_db: Option<f64>,
    /// The largest part of the predicted tone.
    pub mechanism: Option<&'static str>,
    /// Why the row tells nothing.
    pub unused: Option<String>,
}

/// Residuals of the rows that one mechanism dominates.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct MechanismResidual {
    /// `coupling`, `nonlinearity`, `modulator`, `leakage` or `clock`.
    pub mechanism: &'static str,
    /// Rows.
    pub count: usize,
    /// Mean residual \[dB\].
    pub mean_db: f64,
    /// Root mean square about the mean \[dB\]; `None` with one row.
    pub spread_db: Option<f64>,
}

/// A fitted figure where it stands in the plan.
#[derive(Debug, Clone, PartialEq)]
pub struct PlacedFigure {
    /// Where.
    pub place: Place,
    /// Value, in the unit of the figure.
    pub value: f64,
    /// 95 % interval.
    pub interval: (f64, f64),
}

/// A fitted figure.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct FittedFigure {
    /// `anchor 1 level`, `detector.mismatch`.
    pub key: String,
    /// Where it stands in the plan: a coupling in each of its anchors.
    #[serde(skip)]
    pub places: Vec<PlacedFigure>,
    /// Value in the plan; of several anchors, the one level that they make together, where the first was taken.
    pub planned: f64,
    /// Fitted value.
    pub fitted: f64,
    /// 95 % interval.
    pub interval: (f64, f64),
    /// `dBc`, `dB` (a harmonic), `ratio` or `A`.
    pub unit: &'static str,
    /// Rows that tell it: beyond their channels and offsets the model alone carries it.
    pub covered: Vec<String>,
}

/// A calibration.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Calibration {
    /// Every row.
    pub rows: Vec<CalibratedRow>,
    /// Residuals by mechanism.
    pub mechanisms: Vec<MechanismResidual>,
    /// What was fitted.
    pub fitted: Vec<FittedFigure>,
    /// What the rows do not tell, with the reason; it stays as in the plan.
    pub not_fitted: Vec<String>,
    /// Scatter of the rows about the fit \[dB\], as the intervals take it; `None` where nothing was fitted.
    pub scatter_db: Option<f64>,
    /// Degrees of freedom behind it.
    pub freedom: usize,
    /// Where the fit holds: beyond, it is carried by the model alone.
    pub covered: Vec<String>,
}

/// Returns the calibration of a plan by measured rows.
///
/// Parts on one offset add as voltages in phase, as in every prediction of this program; measured levels scatter evenly
/// in decibels. An upper bound counts only where the fit passes it. A row of whose tone a part is unknown is not used.
/// The channels are assessed afresh where each round of the fit has come to, until the figures settle: nothing is carried
/// along a slope of the plan's old values.
///
/// # Errors
/// `AssessError` where the plan as a whole is refused.
pub fn calibrate(plan: &Plan, measured: &[Measured]) -> Result<Calibration, AssessError> {
    let setup = Setup::new(plan)?;
    let found = measured.iter().map(|row| tone_of(&setup, row)).collect::<Result<Vec<_>, _>>()?;
    let rows: Vec<CalibratedRow> = measured.iter().zip(&found).map(|(row, found)| shown(row, found.as_ref())).collect();
    let mut covered = Covered::default();
    let used = || measured.iter().zip(&found).filter_map(|(row, found)| Some((row, found.as_ref().ok()?)));
    for (row, found) in used() {
        covered.note(row, found);
    }
    let mut sentences = covered.sentences();
    if !sentences.is_empty() {
        sentences.push("temperature, supply and board: only those measured".to_owned());
    }
    let mut calibration = Calibration {
        mechanisms: by_mechanism(&rows),
        rows,
        fitted: Vec::new(),
        not_fitted: Vec::new(),
        scatter_db: None,
        freedom: 0,
        covered: sentences,
    };
    Fit { plan, couplings: &couplings(&setup), measured, found: &found }.run(&mut calibration)?;
    Ok(calibration)
}

/// What a fit rests on.
struct Fit<'a> {
    plan: &'a Plan,
    couplings: &'a [Coupling],
    measured: &'a [Measured],
    found: &'a [Result<Found, String>],
}

impl Fit<'_> {
    fn run(&self, calibration: &mut Calibration) -> Result<(), AssessError> {
        let spots: Vec<_> =
            self.found.iter().enumerate().filter_map(|(i, found)| Some((i, found.as_ref().ok()?.spot))).collect();
        let mut moves = Moves::none(self.couplings.len());
        let mut rows = parts(self.plan, self.couplings, &moves, &spots, self.measured)?;
        let chosen = self.told(&rows, calibration);
        if chosen.is_empty() {
            return Ok(());
        }
        for _ in 0..MOST_ROUNDS {
            let Some(step) = fitted(chosen.len(), |by_db| residuals(&rows, &chosen, by_db)) else {
                calibration.not_fitted.push("the rows do not settle the figures: they depend on each other".to_owned());
                return Ok(());
            };
            if step.values.iter().all(|value| value.abs() < SETTLED_DB) {
                self.tell(&chosen, &mut moves, &step, &rows, calibration);
                return Ok(());
            }
            for (parameter, value) in chosen.iter().zip(&step.values) {
                let longest = if *parameter == Parameter::OffsetCurrent { LONGEST_OFFSET_MOVE_DB } else { f64::MAX };
                *moves.of(*parameter) += value.clamp(-longest, longest);
            }
            rows = parts(self.plan, self.couplings, &moves, &spots, self.measured)?;
        }
        calibration.not_fitted.push(format!("the figures do not settle in {MOST_ROUNDS} rounds: none is fitted"));
        Ok(())
    }

    /// Returns the figures that the rows tell, and notes why each of the others is left.
    fn told(&self, rows: &[Parts], calibration: &mut Calibration) -> Vec<Parameter> {
        let count = self.couplings.len();
        let mut asked: Vec<Parameter> = (0..count).map(Parameter::Level).collect();
        asked.push(Parameter::Mismatch);
        if self.plan.detector.offset_current_a != 0.0 {
            asked.push(Parameter::OffsetCurrent);
        }
        asked.extend((0..count).map(Parameter::RollOff));
        let column = |parameter| -> Vec<f64> {
            rows.iter().filter(|row| !row.is_bound).map(|row| row.share(parameter)).collect()
        };
        let mut chosen: Vec<Parameter> = Vec::new();
        for parameter in asked {
            let name = name(self.couplings, parameter);
            if parameter == Parameter::Mismatch && single_mismatch(self.plan).is_none() {
                calibration.not_fitted.push(format!("{name}: the plan gives no single value other than 0"));
                continue;
            }
            let own = column(parameter);
            if own.iter().all(|share| share.abs() < least_share(parameter)) {
                calibration.not_fitted.push(format!("{name}: at its planned value no measured tone depends on it"));
                continue;
            }
            let size = |c: &[f64]| c.iter().map(|x| x * x).sum::<f64>().sqrt();
            let twin = chosen.iter().find(|other| {
                let other = column(**other);
                let dot: f64 = own.iter().zip(&other).map(|(a, b)| a * b).sum();
                (dot / (size(&own) * size(&other))).abs() > ALIKE
            });
            match twin {
                Some(other) => calibration.not_fitted.push(format!(
                    "{name}: the rows cannot tell it from {}; measure where the two differ",
                    parameters::name(self.couplings, *other)
                )),
                None => chosen.push(parameter),
            }
        }
        chosen
    }

    /// Notes the figures that a settled fit has found.
    fn tell(
        &self,
        chosen: &[Parameter],
        moves: &mut Moves,
        last: &solve::Fit,
        rows: &[Parts],
        calibration: &mut Calibration,
    ) {
        for row in rows {
            calibration.rows[row.row].fitted_dbc = Some(row.level(chosen, &last.values).0);
        }
        for ((parameter, step), half) in chosen.iter().zip(&last.values).zip(&last.half_widths) {
            *moves.of(*parameter) += step;
            let mut figure = figure(self.plan, self.couplings, *parameter, (*moves.of(*parameter), *half));
            let mut covered = Covered::default();
            for row in rows.iter().filter(|row| !row.is_bound && row.share(*parameter).abs() >= LEAST_SHARE) {
                if let Ok(found) = &self.found[row.row] {
                    covered.note(&self.measured[row.row], found);
                }
            }
            figure.covered = covered.sentences();
            calibration.fitted.push(figure);
        }
        calibration.scatter_db = Some(last.scatter_db);
        calibration.freedom = last.freedom;
    }
}

fn least_share(parameter: Parameter) -> f64 {
    if matches!(parameter, Parameter::RollOff(_)) { LEAST_ROLL_OFF_SHARE } else { LEAST_SHARE }
}

/// Returns measured minus fitted of every row with the slopes of the fit; `None` for a bound that is met.
fn residuals(rows: &[Parts], chosen: &[Parameter], by_db: &[f64]) -> Vec<Option<(f64, Vec<f64>)>> {
    rows.iter()
        .map(|row| {
            let (fitted_dbc, slopes) = row.level(chosen, by_db);
            let residual = row.measured_dbc - fitted_dbc;
            (!row.is_bound || residual < 0.0).then_some((residual, slopes))
        })
        .collect()
}
