//! Loop, curve and noise over N + K/M, computed once for a plan: what channels share but for their divider ratio.

use std::cell::OnceCell;
use std::collections::BTreeMap;
use std::f64::consts::TAU;
use std::sync::{Arc, Mutex, PoisonError};

use crate::base::Frequency;
use crate::loop_model::{LoopFigures, LoopPoint, LoopResponse, PhaseFigures, log_grid, static_charge_cycles};
use crate::modulator::{Modulus, ModulusRule};
use crate::plan::{Gain, MismatchPoints, Plan};
use crate::tones::{Charge, PhaseDensity};

use super::channel::charge_curve;
use super::curve_point::CurvePoint;
use super::lines::{FamilyLines, ShortLattice};
use super::noise::{BudgetPoint, budget_at, dither_step};
use super::placement::{Placement, tuning_voltage};
use super::result::Method;
use super::setup::{LoopSource, Setup, gain_at};
use super::smooth_table::{SmoothTable, TableSource};

/// Most direct evaluations for one table: half a second for the slowest.
const MOST_CALLS: usize = 400;
/// Relative error of a loop figure.
const LOOP_ERROR: f64 = 1e-9;
/// Relative error of a noise integral: 4e-6 dB.
const NOISE_ERROR: f64 = 1e-6;
/// Largest share of N + K/M by which dither may move the VCO beside a table.
const LARGEST_SHIFT: f64 = 1e-9;

/// The tables of a plan.
#[derive(Debug)]
pub(super) struct Tables {
    response: Option<SmoothTable>,
    curve: Option<SmoothTable>,
    /// The curve on short lattices, by number of points and bits of the start; each made when it is first asked for.
    lattices: Mutex<BTreeMap<(u64, u64), Arc<SmoothTable>>>,
    breaks: Vec<f64>,
    noise: Vec<NoiseTable>,
}

/// What the modulator adds to the noise.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum ModulatorNoise {
    /// Nothing, or lines.
    Absent,
    /// Shaped and folded noise.
    Present,
}

/// Noise integrals between two limits behind one output divider: the known sources, then a flat density at the divider.
#[derive(Debug)]
struct NoiseTable {
    limits_hz: (f64, f64),
    output_divider: u64,
    modulator: ModulatorNoise,
    table: SmoothTable,
    unknown: Vec<String>,
}

impl Tables {
    /// Returns the tables over a range of N + K/M.
    pub(super) fn new(setup: &Setup, ratios: (f64, f64)) -> Self {
        let breaks = breaks(setup, ratios);
        let response = match setup.source() {
            LoopSource::Network(_) => Some(response_table(setup, &breaks)),
            LoopSource::Measured(_) => None,
        };
        let curve = curve_table(setup, &breaks, None);
        let mut tables =
            Self { response, curve, lattices: Mutex::new(BTreeMap::new()), breaks: Vec::new(), noise: Vec::new() };
        tables.noise = noise_tables(setup, &tables, &breaks);
        tables.breaks = breaks;
        tables
    }

    /// Returns the loop at a divider ratio; `None` where the direct route is due.
    pub(super) fn response(&self, setup: &Setup, divider: f64) -> Option<LoopResponse> {
        let LoopSource::Network(network) = setup.source() else { return None };
        let row = self.response.as_ref()?.at(divider)?;
        Some(LoopResponse::with_figures(network, loop_point(setup, divider), figures_of(&row)))
    }

    /// Returns the curve at a divider ratio; `None` where the direct route is due.
    fn curve(&self, divider: f64) -> Option<CurvePoint> {
        Some(CurvePoint::from_row(&self.curve.as_ref()?.at(divider)?))
    }

    /// Returns the curve on a short lattice. Its table depends on the lattice alone, so the order in which channels ask
    /// changes nothing.
    fn lattice_curve(&self, setup: &Setup, lattice: ShortLattice, divider: f64) -> Option<CurvePoint> {
        let key = (lattice.points, lattice.start_cycles.to_bits());
        let known = self.lattices.lock().unwrap_or_else(PoisonError::into_inner).get(&key).cloned();
        let table = match known {
            Some(table) => table,
            None => {
                let made = Arc::new(curve_table(setup, &self.breaks, Some(lattice))?);
                self.lattices.lock().unwrap_or_else(PoisonError::into_inner).insert(key, Arc::clone(&made));
                made
            }
        };
        Some(CurvePoint::from_row(&table.at(divider)?))
    }

    /// Makes every table wrong by a factor, for the test of the run's own check.
    #[cfg(test)]
    pub(crate) fn bend(&mut self, curve_by: f64, noise_by: f64) {
        self.curve.iter_mut().for_each(|table| table.bend(curve_by));
        self.noise.iter_mut().for_each(|noise| noise.table.bend(noise_by));
    }
}

impl Setup<'_> {
    /// Returns the curve of a channel from the plan's table; `None` where the direct route is due.
    pub(super) fn tabulated_curve(&self, placement: &Placement, lattice: Option<ShortLattice>) -> Option<CurvePoint> {
        let is_shaped = placement.modulator.has_ideal_shaping();
        let tables = self.tables().filter(|_| is_shaped && is_on_table(placement))?;
        match lattice {
            None => tables.curve(placement.divider_ratio()),
            Some(lattice) => tables.lattice_curve(self, lattice, placement.divider_ratio()),
        }
    }

    /// Returns the noise figures of a channel and the names of unknown sources from the plan's table; `None` where the
    /// direct route is due.
    pub(super) fn tabulated_noise(
        &self,
        placement: &Placement,
        lines: Option<&FamilyLines>,
        limits_hz: (f64, f64),
    ) -> Option<(PhaseFigures, Vec<String>)> {
        let tables = self.tables().filter(|_| is_on_table(placement))?;
        let modulator = match lines {
            None => ModulatorNoise::Absent,
            Some(lines) if lines.period.is_some() => ModulatorNoise::Absent,
            Some(lines) if lines.method == Method::SharedCurve => ModulatorNoise::Present,
            Some(_) => return None,
        };
        let found = tables.noise.iter().find(|noise| {
            noise.limits_hz == limits_hz
                && noise.output_divider == placement.output_divider
                && noise.modulator == modulator
        })?;
        let divider = placement.divider_ratio();
        let row = found.table.at(divider)?;
        let mut figures = PhaseFigures { phase_rad2: row[0], frequency_hz2: row[1] };
        if let Some(own) = lines.filter(|lines| lines.on_lattice).and_then(|lines| lines.folded) {
            // The loop rests a little elsewhere on a lattice and folds a little more or less.
            let more_cycles2 = own.density_cycles2 - tables.curve(divider)?.folded.density_cycles2;
            let more_rad2_per_hz = TAU * TAU * more_cycles2 / self.pfd().to_f64_hz();
            figures.phase_rad2 += more_rad2_per_hz * row[2];
            figures.frequency_hz2 += more_rad2_per_hz * row[3];
        }
        Some((figures, found.unknown.clone()))
    }
}

/// Returns whether the VCO lies where the divider ratio says: dither at the first stage moves it.
fn is_on_table(placement: &Placement) -> bool {
    placement.modulator.mean_shift().to_f64().abs() <= LARGEST_SHIFT * placement.divider_ratio()
}

/// Returns the range with every ratio inside it at which a curve of the plan has a corner.
fn breaks(setup: &Setup, (low, high): (f64, f64)) -> Vec<f64> {
    let plan = setup.plan();
    let pfd_hz = setup.pfd().to_f64_hz();
    let mut corners_hz: Vec<f64> = Vec::new();
    if let Gain::Table(points) = &plan.oscillator.gain {
        corners_hz.extend(points.iter().map(|point| point.0));
    }
    if let (Some(MismatchPoints::Table(points)), Some(tuning)) = (&plan.detector.mismatch, &plan.oscillator.tuning) {
        corners_hz.extend(tuning.iter().map(|point| point.1));
        let frequency = |volts: f64| super::setup::interpolate(tuning, volts);
        corners_hz.extend(points.iter().map(|point| frequency(point.0)));
    }
    let mut breaks: Vec<f64> =
        corners_hz.into_iter().map(|hz| hz / pfd_hz).filter(|ratio| *ratio > low && *ratio < high).collect();
    breaks.extend([low, high]);
    breaks.sort_by(f64::total_cmp);
    breaks.dedup();
    breaks
}

fn loop_point(setup: &Setup, divider: f64) -> LoopPoint {
    let pfd_hz = setup.pfd().to_f64_hz();
    let plan = setup.plan();
    let gain_hz_per_v = gain_at(&plan.oscillator.gain, divider * pfd_hz);
    LoopPoint { current_a: plan.detector.current_a, gain_hz_per_v, divider, pfd_hz }
}

/// The figures of a row; every one is known where a table holds it.
fn figures_of(row: &[f64]) -> LoopFigures {
    LoopFigures {
        unity_gain_hz: Some(row[0]),
        phase_margin_deg: Some(row[1]),
        peak_gain: Some(row[2]),
        closed_loop_3db_hz: Some(row[3]),
    }
}

/// The loop's figures. A loop that is unstable anywhere on a piece leaves the piece to the direct route, which refuses
/// it by name; loop gain is monotonic between corners, so its extremes are among the points.
fn response_table(setup: &Setup, breaks: &[f64]) -> SmoothTable {
    let function = |divider: f64| {
        let found = setup.response_of(setup.plan(), divider, setup.pfd()).ok()?.figures();
        Some(vec![found.unity_gain_hz?, found.phase_margin_deg?, found.peak_gain?, found.closed_loop_3db_hz?])
    };
    let is_close = |exact: &[f64], found: &[f64]| relative_error(exact, found) <= LOOP_ERROR;
    SmoothTable::new(breaks, &TableSource { function: &function, is_close: &is_close, most_calls: MOST_CALLS })
}

/// Returns the largest relative difference.
fn relative_error(exact: &[f64], found: &[f64]) -> f64 {
    exact.iter().zip(found).map(|(a, b)| if a == b { 0.0 } else { (a - b).abs() / a.abs() }).fold(0.0, f64::max)
}

/// The curve of sequences with ideal shaping; `None` where the plan's order has none.
fn curve_table(setup: &Setup, breaks: &[f64], lattice: Option<ShortLattice>) -> Option<SmoothTable> {
    let plan = setup.plan();
    let density = PhaseDensity::mash(plan.modulator.settings.order).ok()?;
    let harmonics = plan.boundary.largest_q.max(plan.boundary.harmonics);
    let function =
        |divider: f64| Some(direct_curve(plan, setup.pfd(), (&density, lattice), (divider, harmonics))?.to_row());
    let source = TableSource { function: &function, is_close: &CurvePoint::is_close, most_calls: MOST_CALLS };
    Some(SmoothTable::new(breaks, &source))
}

/// Returns the curve at a divider ratio by the direct route; `None` where the loop cannot rest or the mismatch has no
/// value although it is given.
fn direct_curve(
    plan: &Plan,
    pfd: Frequency,
    (density, lattice): (&PhaseDensity, Option<ShortLattice>),
    (divider, harmonics): (f64, u64),
) -> Option<CurvePoint> {
    let detector = &plan.detector;
    let vco_hz = divider * pfd.to_f64_hz();
    let tuning_v = plan.oscillator.tuning.as_deref().and_then(|curve| tuning_voltage(curve, vco_hz));
    let curve = charge_curve(plan, vco_hz, tuning_v);
    if curve.is_none() && detector.mismatch.is_some() {
        return None;
    }
    let at = |p: f64| curve.as_ref().map_or(p, |curve| curve.at(p));
    let kinks = curve.as_ref().map_or(&[][..], |curve| curve.kinks());
    let drained_a = detector.offset_current_a + detector.leakage_a.unwrap_or(0.0);
    let target_cycles = static_charge_cycles(drained_a, detector.current_a, divider);
    CurvePoint::new(density, lattice, Charge::new(&at, kinks), target_cycles, harmonics).ok()
}

/// Noise integrals for every pair of limits and output divider in the plan.
fn noise_tables(setup: &Setup, tables: &Tables, breaks: &[f64]) -> Vec<NoiseTable> {
    let plan = setup.plan();
    let mut list: Vec<NoiseTable> = Vec::new();
    let modulus = match plan.modulator.modulus.working(plan.modulator.settings.structure) {
        Ok(ModulusRule::Fixed(modulus)) => Some(modulus),
        Ok(_) | Err(_) => None,
    };
    for group in &plan.groups {
        let limits_hz = group.limits.integration_hz;
        for &output_divider in &group.output_dividers {
            for modulator in [ModulatorNoise::Absent, ModulatorNoise::Present] {
                let is_known = list.iter().any(|noise| {
                    noise.limits_hz == limits_hz
                        && noise.output_divider == output_divider
                        && noise.modulator == modulator
                });
                if !is_known {
                    let wanted = Wanted { limits_hz, output_divider, modulator, modulus };
                    list.extend(noise_table(setup, tables, breaks, wanted));
                }
            }
        }
    }
    list
}

#[derive(Clone, Copy)]
struct Wanted {
    limits_hz: (f64, f64),
    output_divider: u64,
    modulator: ModulatorNoise,
    /// The modulus where every channel has the same.
    modulus: Option<Modulus>,
}

/// Returns one table; `None` where the dither's step differs from channel to channel.
fn noise_table(setup: &Setup, tables: &Tables, breaks: &[f64], wanted: Wanted) -> Option<NoiseTable> {
    let plan = setup.plan();
    let Wanted { limits_hz, output_divider, modulator, modulus } = wanted;
    let settings = &plan.modulator.settings;
    let is_dithered = settings.dither.stage_and_weight().is_some();
    if is_dithered && modulus.is_none() {
        return None;
    }
    let is_present = modulator == ModulatorNoise::Present;
    let is_charge_known = plan.detector.table.is_some() || plan.detector.mismatch.is_some();
    let grid = log_grid(limits_hz.0, limits_hz.1);
    let unknown = OnceCell::new();
    let function = |divider: f64| {
        let response =
            tables.response(setup, divider).or_else(|| setup.response_of(plan, divider, setup.pfd()).ok())?;
        let folded_cycles2 = match (is_present, is_charge_known) {
            (false, _) => None,
            (true, false) => Some(None),
            (true, true) => Some(Some(tables.curve(divider)?.folded.density_cycles2)),
        };
        let point = BudgetPoint {
            divider,
            vco_hz: divider * setup.pfd().to_f64_hz(),
            output_divider,
            order: is_present.then_some(settings.order),
            dither: modulus.and_then(|modulus| dither_step(settings.dither, modulus)),
            folded_cycles2,
        };
        let budget = budget_at(setup, &point, &response, grid.clone());
        let known = PhaseFigures::of(&budget.offset_hz, &budget.known(), limits_hz);
        // What a flat density of 1 rad²/Hz at the divider adds.
        let per_output = (output_divider as f64).powi(-2);
        let gains: Vec<f64> = grid.iter().map(|f| response.closed_loop(*f).norm_sqr() * per_output).collect();
        let gain = PhaseFigures::of(&grid, &gains, limits_hz);
        // Which sources are unknown depends on the plan alone; a difference would be a reason to compute directly.
        (unknown.get_or_init(|| budget.unknown.clone()) == &budget.unknown)
            .then(|| vec![known.phase_rad2, known.frequency_hz2, gain.phase_rad2, gain.frequency_hz2])
    };
    let is_close = |exact: &[f64], found: &[f64]| relative_error(exact, found) <= NOISE_ERROR;
    let table =
        SmoothTable::new(breaks, &TableSource { function: &function, is_close: &is_close, most_calls: MOST_CALLS });
    Some(NoiseTable { limits_hz, output_divider, modulator, table, unknown: unknown.into_inner()? })
}
