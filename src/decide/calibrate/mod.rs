//! Measured tones fed back: predicted against measured, anchors and mismatch fitted with intervals.

mod solve;

use std::collections::BTreeMap;

use serde::Serialize;

use crate::assess::{AssessError, Setup, Tone};
use crate::base::{Frequency, db_from_power, power_from_db};
use crate::plan::{Measured, MismatchPoints, Place, Plan};

use solve::fitted;

/// Share of a tone's voltage from which a row tells anything of a parameter.
const LEAST_SHARE: f64 = 0.05;
/// Step of the offset current by which its effect is found.
const OFFSET_STEP: f64 = 1.05;
/// Two parameters whose rows are this much alike cannot be told apart.
const ALIKE: f64 = 0.995;

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

/// A fitted figure.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct FittedFigure {
    /// `anchor 1 level`, `detector.mismatch`.
    pub key: String,
    /// Where it stands in the plan.
    #[serde(skip)]
    pub place: Place,
    /// Value in the plan (dBc, or a ratio).
    pub planned: f64,
    /// Fitted value.
    pub fitted: f64,
    /// 95 % interval.
    pub interval: (f64, f64),
    /// `dBc`, `ratio` or `A`.
    pub unit: &'static str,
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
    /// Scatter of the rows about the fit \[dB\]; `None` where nothing was fitted.
    pub scatter_db: Option<f64>,
    /// Degrees of freedom behind it.
    pub freedom: usize,
    /// Where the fit holds: beyond, it is carried by the model alone.
    pub covered: Vec<String>,
}

/// Parts of one row's tone as voltages against the carrier.
struct Parts {
    row: usize,
    /// By anchor.
    coupling: Vec<f64>,
    nonlinearity: f64,
    /// How the nonlinearity part moves with the offset current \[dB a dB\].
    offset_slope: f64,
    rest: f64,
    measured_dbc: f64,
    is_bound: bool,
}

fn voltage(level_dbc: Option<f64>) -> f64 {
    level_dbc.map_or(0.0, |level| power_from_db(level).sqrt())
}

fn level(volts: f64) -> f64 {
    db_from_power(volts * volts)
}

/// Returns the calibration of a plan by measured rows.
///
/// Parts on one offset add as voltages in phase, as in every prediction of this program; measured levels scatter evenly
/// in decibels. An upper bound counts only where the fit passes it. The nonlinearity part is taken as proportional to
/// the mismatch, and to a power of the offset current that a small step of it shows: far from the plan's value calibrate
/// the written plan once more.
///
/// # Errors
/// `AssessError` where the plan as a whole is refused.
pub fn calibrate(plan: &Plan, measured: &[Measured]) -> Result<Calibration, AssessError> {
    let setup = Setup::new(plan)?;
    // Anchors of one path and q are one coupling: the first stands for all of them.
    let twin = |i: usize, j: usize| {
        plan.anchors[i].mechanism == plan.anchors[j].mechanism && plan.anchors[i].q == plan.anchors[j].q
    };
    let alone = (0..plan.anchors.len())
        .map(|i| {
            let is_first = (0..i).all(|j| !twin(i, j));
            let own = (0..plan.anchors.len()).filter(|j| is_first && twin(i, *j));
            Plan { anchors: own.map(|j| plan.anchors[j].clone()).collect(), ..plan.clone() }
        })
        .collect::<Vec<Plan>>();
    let alone_setups = alone.iter().map(Setup::new).collect::<Result<Vec<_>, _>>()?;
    let stepped = stepped_offsets(plan);
    let stepped_setups = stepped.iter().map(Setup::new).collect::<Result<Vec<_>, _>>()?;
    let mut rows = Vec::new();
    let mut parts = Vec::new();
    let mut covered = Covered::default();
    for (index, row) in measured.iter().enumerate() {
        let mut shown = CalibratedRow {
            line: row.line,
            channel: row.channel,
            offset_hz: row.offset.to_f64_hz(),
            measured_dbc: row.level_dbc,
            is_bound: row.is_bound,
            label: None,
            predicted_dbc: None,
            fitted_dbc: None,
            residual_db: None,
            mechanism: None,
            unused: None,
        };
        match tone_of(&setup, row)? {
            Err(why) => shown.unused = Some(why),
            Ok((group, place, tone, output_divider)) => {
                shown.label = Some(tone.label.clone());
                shown.predicted_dbc = tone.known_level_dbc;
                shown.mechanism = largest_part(&tone);
                shown.residual_db = tone
                    .known_level_dbc
                    .map(|predicted| row.level_dbc - predicted)
                    .filter(|residual| !row.is_bound || *residual < 0.0);
                let at = (group, place, row.channel, tone.offset_hz);
                let coupling = parts_on(&alone_setups, at, |tone| tone.contributions.coupling_dbc)?;
                let stepped_dbc = parts_on(&stepped_setups, at, |tone| tone.contributions.nonlinearity_dbc)?;
                let c = &tone.contributions;
                parts.push(Parts {
                    row: index,
                    coupling: coupling.into_iter().map(voltage).collect(),
                    nonlinearity: voltage(c.nonlinearity_dbc),
                    offset_slope: match stepped_dbc.as_slice() {
                        [Some(low), Some(high)] => (high - low) / (2.0 * level(OFFSET_STEP)),
                        _ => 0.0,
                    },
                    rest: voltage(c.modulator_dbc) + voltage(c.leakage_dbc) + voltage(c.clock_dbc),
                    measured_dbc: row.level_dbc,
                    is_bound: row.is_bound,
                });
                covered.note(row, &tone, output_divider);
            }
        }
        rows.push(shown);
    }
    let mut calibration = Calibration {
        mechanisms: by_mechanism(&rows),
        rows,
        fitted: Vec::new(),
        not_fitted: Vec::new(),
        scatter_db: None,
        freedom: 0,
        covered: covered.sentences(),
    };
    fit(plan, &parts, &mut calibration);
    Ok(calibration)
}

/// Returns one part of the tone at an offset \[Hz\] of a channel, for each of several plans.
fn parts_on(
    setups: &[Setup],
    (group, place, channel, offset_hz): (usize, u64, Frequency, f64),
    part: impl Fn(&Tone) -> Option<f64>,
) -> Result<Vec<Option<f64>>, AssessError> {
    setups
        .iter()
        .map(|setup| {
            let result = setup.assess(group, place, channel, &mut setup.scratch())?;
            Ok(result.tones.iter().find(|other| (other.offset_hz - offset_hz).abs() < 1e-6).and_then(&part))
        })
        .collect()
}

/// Returns the plan with a slightly smaller and a slightly larger offset current; none without one.
fn stepped_offsets(plan: &Plan) -> Vec<Plan> {
    let current_a = plan.detector.offset_current_a;
    if current_a == 0.0 {
        return Vec::new();
    }
    [1.0 / OFFSET_STEP, OFFSET_STEP]
        .into_iter()
        .map(|factor| {
            let mut stepped = plan.clone();
            stepped.detector.offset_current_a = current_a * factor;
            stepped
        })
        .collect()
}

/// A tone with its group, place and output divider, or why there is none.
type Found = Result<(usize, u64, Tone, u64), String>;

fn tone_of(setup: &Setup, row: &Measured) -> Result<Found, AssessError> {
    let plan = setup.plan();
    let Some((group, place)) = plan.locate(row.channel, row.group.as_deref()) else {
        return Ok(Err("no group holds the channel".to_owned()));
    };
    let place = place.unwrap_or_else(|| plan.groups[group].channels.len());
    let result = setup.assess(group, place, row.channel, &mut setup.scratch())?;
    if !result.legal {
        return Ok(Err("the channel has no legal word".to_owned()));
    }
    let reach_hz = row.rbw_hz.unwrap_or(0.0).max(1.0);
    let offset_hz = row.offset.to_f64_hz();
    let nearest = result
        .tones
        .into_iter()
        .filter(|tone| (tone.offset_hz - offset_hz).abs() <= reach_hz)
        .min_by(|a, b| (a.offset_hz - offset_hz).abs().total_cmp(&(b.offset_hz - offset_hz).abs()));
    Ok(match nearest {
        None => Err(format!("no tone is predicted within {reach_hz} Hz of this offset")),
        Some(tone) if tone.known_level_dbc.is_none() => {
            Err("the tone's level is unknown: no part of it is predicted".to_owned())
        }
        Some(tone) => Ok((group, place, tone, result.output_divider.unwrap_or(1))),
    })
}

fn largest_part(tone: &Tone) -> Option<&'static str> {
    let c = &tone.contributions;
    [
        ("coupling", c.coupling_dbc),
        ("nonlinearity", c.nonlinearity_dbc),
        ("modulator", c.modulator_dbc),
        ("leakage", c.leakage_dbc),
        ("clock", c.clock_dbc),
    ]
    .into_iter()
    .filter_map(|(name, level)| Some((name, level?)))
    .max_by(|a, b| a.1.total_cmp(&b.1))
    .map(|(name, _)| name)
}

fn by_mechanism(rows: &[CalibratedRow]) -> Vec<MechanismResidual> {
    let mut residuals: BTreeMap<&'static str, Vec<f64>> = BTreeMap::new();
    for row in rows.iter().filter(|row| !row.is_bound) {
        if let (Some(mechanism), Some(residual)) = (row.mechanism, row.residual_db) {
            residuals.entry(mechanism).or_default().push(residual);
        }
    }
    residuals
        .into_iter()
        .map(|(mechanism, residuals)| {
            let count = residuals.len();
            let mean_db = residuals.iter().sum::<f64>() / count as f64;
            let square: f64 = residuals.iter().map(|r| (r - mean_db).powi(2)).sum();
            let spread_db = (count > 1).then(|| (square / (count - 1) as f64).sqrt());
            MechanismResidual { mechanism, count, mean_db, spread_db }
        })
        .collect()
}

/// Returns the name of parameter `i`: an anchor, or the mismatch after them.
fn key_of(anchors: usize, i: usize) -> String {
    match i.checked_sub(anchors) {
        None => format!("anchor {} level", i + 1),
        Some(0) => "detector.mismatch".to_owned(),
        Some(_) => "detector.offset_current".to_owned(),
    }
}

/// Returns the parameters that the rows tell, and notes why each of the others is left.
fn told(plan: &Plan, parts: &[Parts], planned: Option<f64>, calibration: &mut Calibration) -> Vec<usize> {
    let anchors = plan.anchors.len();
    let name = |i: usize| key_of(anchors, i);
    let share = |part: &Parts, i: usize| {
        let volts = match i.checked_sub(anchors) {
            None => part.coupling[i],
            Some(0) => part.nonlinearity,
            Some(_) => part.nonlinearity * part.offset_slope,
        };
        volts / (part.coupling.iter().sum::<f64>() + part.nonlinearity + part.rest)
    };
    let column = |i: usize| -> Vec<f64> { parts.iter().filter(|p| !p.is_bound).map(|p| share(p, i)).collect() };
    let mut chosen: Vec<usize> = Vec::new();
    for i in 0..anchors + 2 {
        if i == anchors + 1 && plan.detector.offset_current_a == 0.0 {
            continue;
        }
        if i == anchors && planned.is_none() {
            calibration.not_fitted.push("detector.mismatch: the plan gives no single value other than 0".to_owned());
            continue;
        }
        let own = column(i);
        if own.iter().all(|share| share.abs() < LEAST_SHARE) {
            calibration.not_fitted.push(format!("{}: no measured tone depends on it", name(i)));
            continue;
        }
        let size = |c: &[f64]| c.iter().map(|x| x * x).sum::<f64>().sqrt();
        let twin = chosen.iter().find(|j| {
            let other = column(**j);
            let dot: f64 = own.iter().zip(&other).map(|(a, b)| a * b).sum();
            (dot / (size(&own) * size(&other))).abs() > ALIKE
        });
        match twin {
            Some(j) => calibration.not_fitted.push(format!(
                "{}: the rows cannot tell it from {}; measure where the two differ",
                name(i),
                name(*j)
            )),
            None => chosen.push(i),
        }
    }
    chosen
}

/// Returns a figure that was fitted as a factor in decibels.
fn scaled(key: String, place: Place, planned: f64, (shift, half): (f64, f64), unit: &'static str) -> FittedFigure {
    let at = |db: f64| planned * power_from_db(db).sqrt();
    let (a, b) = (at(shift - half), at(shift + half));
    FittedFigure { key, place, planned, fitted: at(shift), interval: (a.min(b), a.max(b)), unit }
}

/// Fits what the rows tell: shifts of anchors and of the mismatch \[dB\].
fn fit(plan: &Plan, parts: &[Parts], calibration: &mut Calibration) {
    let anchors = plan.anchors.len();
    let planned = match &plan.detector.mismatch {
        Some(MismatchPoints::Constant(value)) if *value != 0.0 => Some(*value),
        _ => None,
    };
    let chosen = told(plan, parts, planned, calibration);
    if chosen.is_empty() {
        return;
    }
    let shifted = |part: &Parts, shifts: &[f64]| -> (f64, Vec<f64>) {
        let by = |i: usize| chosen.iter().position(|c| *c == i).map_or(0.0, |place| shifts[place]);
        let coupling: Vec<f64> =
            part.coupling.iter().enumerate().map(|(i, volts)| volts * power_from_db(by(i)).sqrt()).collect();
        let bent_db = by(anchors) + part.offset_slope * by(anchors + 1);
        let nonlinearity = part.nonlinearity * power_from_db(bent_db).sqrt();
        let volts = part.rest + nonlinearity + coupling.iter().sum::<f64>();
        // d(20·log10 V)/d(shift) is the term's share.
        let slope = |i: &usize| match i.checked_sub(anchors) {
            None => coupling[*i] / volts,
            Some(0) => nonlinearity / volts,
            Some(_) => part.offset_slope * nonlinearity / volts,
        };
        (level(volts), chosen.iter().map(slope).collect())
    };
    let model = |shifts: &[f64]| {
        parts
            .iter()
            .map(|part| {
                let (fitted_dbc, slopes) = shifted(part, shifts);
                let residual = part.measured_dbc - fitted_dbc;
                if part.is_bound && residual >= 0.0 { (0.0, vec![0.0; chosen.len()]) } else { (residual, slopes) }
            })
            .unzip()
    };
    let Some(found) = fitted(chosen.len(), model) else {
        calibration.not_fitted.push("the rows do not settle the figures: they depend on each other".to_owned());
        return;
    };
    for part in parts {
        calibration.rows[part.row].fitted_dbc = Some(shifted(part, &found.values).0);
    }
    for ((i, shift), half) in chosen.iter().zip(&found.values).zip(&found.half_widths) {
        let key = key_of(anchors, *i);
        let figure = match i.checked_sub(anchors) {
            None => {
                let planned = plan.anchors[*i].level_dbc;
                let interval = (planned + shift - half, planned + shift + half);
                FittedFigure {
                    key,
                    place: Place::AnchorLevel(*i),
                    planned,
                    fitted: planned + shift,
                    interval,
                    unit: "dBc",
                }
            }
            Some(0) => scaled(key, Place::Mismatch, planned.unwrap_or(0.0), (*shift, *half), "ratio"),
            Some(_) => {
                let current_a = plan.detector.offset_current_a;
                scaled(key, Place::OffsetCurrent, current_a, (*shift, *half), "A")
            }
        };
        calibration.fitted.push(figure);
    }
    calibration.scatter_db = Some(found.scatter_db);
    calibration.freedom = found.freedom;
}

/// Ranges that the rows cover.
#[derive(Default)]
struct Covered {
    channels: Option<(Frequency, Frequency)>,
    offsets: Option<(Frequency, Frequency)>,
    q: Vec<u64>,
    dividers: Vec<u64>,
}

impl Covered {
    fn note(&mut self, row: &Measured, tone: &Tone, output_divider: u64) {
        let wider = |range: Option<(Frequency, Frequency)>, value: Frequency| {
            let (low, high) = range.unwrap_or((value, value));
            Some((low.min(value), high.max(value)))
        };
        self.channels = wider(self.channels, row.channel);
        self.offsets = wider(self.offsets, row.offset);
        self.q.extend(tone.q);
        self.dividers.push(output_divider);
    }

    fn sentences(mut self) -> Vec<String> {
        let (Some(channels), Some(offsets)) = (self.channels, self.offsets) else { return Vec::new() };
        let list = |values: &mut Vec<u64>| {
            values.sort_unstable();
            values.dedup();
            values.iter().map(u64::to_string).collect::<Vec<_>>().join(", ")
        };
        let (q, dividers) = (list(&mut self.q), list(&mut self.dividers));
        let q = if q.is_empty() { "none".to_owned() } else { q };
        vec![
            format!("channels {} to {}", channels.0, channels.1),
            format!("offsets {} to {}", offsets.0, offsets.1),
            format!("boundaries of q = {q}; output dividers {dividers}"),
            "temperature, supply and board: only those measured".to_owned(),
        ]
    }
}
