//! The tones of one channel, position by position: which causes act where, and how strongly.

use crate::base::{Basis, Exact, ExactError, Frequency};
use crate::plan::{Clock, Plan};
use crate::tones::{
    AnchorLevel, Carriers, ClockPath, CouplingOrder, FamilyTone, Mechanism, Transfer, clock_tones, nearest_fraction,
    worst_case_sum_dbc,
};

use super::candidate::{Candidate, Label, Part};
use super::placement::Placement;
use super::result::Origin;

/// Highest harmonic of the PFD frequency that is listed.
const REFERENCE_HARMONICS: u64 = 3;

/// Levels of one line of the modulator family at the output.
#[derive(Debug, Clone, PartialEq)]
pub struct LineLevel {
    /// Line of ψ.
    pub modulator: Part,
    /// Line of g(ψ + a) − ψ.
    pub nonlinearity: Part,
    /// Half width of the uncertainty from the method \[dB\].
    pub uncertainty_db: Option<f64>,
}

/// What the listing of one channel rests on.
pub struct Scene<'a> {
    /// The plan.
    pub plan: &'a Plan,
    /// PFD frequency.
    pub pfd: Frequency,
    /// The channel's word.
    pub placement: &'a Placement,
    /// Anchors of the board.
    pub anchors: &'a [AnchorLevel],
    /// Anchors of the clocks, in the order of `plan.clocks`.
    pub clock_anchors: &'a [Option<AnchorLevel>],
    /// What the channel's loop does to a tone at an offset \[Hz\].
    pub transfer: &'a dyn Fn(f64) -> Transfer,
}

impl Scene<'_> {
    /// Returns whether an offset is inside the span.
    fn in_span(&self, offset: Frequency) -> bool {
        offset.to_f64_hz() <= self.plan.analysis.span_hz
    }

    /// Returns the sum of the couplings at an offset through the anchors that `applies` picks, with the boundary and
    /// order each stands for; unknown where a boundary has no anchor.
    fn coupling(&self, offset: Frequency, orders: &[CouplingOrder], applies: fn(Mechanism) -> bool) -> Part {
        if orders.is_empty() {
            return Part::Absent;
        }
        let here = (self.transfer)(offset.to_f64_hz());
        let mut levels = Vec::new();
        let mut basis = Basis::Measured;
        for coupling in orders {
            let before = levels.len();
            for anchor in self.anchors.iter().filter(|anchor| anchor.q == coupling.q && applies(anchor.mechanism)) {
                if let Some(level) = anchor.level_dbc_at(coupling.order, &here) {
                    levels.push(level);
                    basis = basis.max(anchor.basis);
                }
            }
            if levels.len() == before {
                return Part::Unknown(format!("no anchor for q = {}", coupling.q));
            }
        }
        worst_case_sum_dbc(levels).map_or(Part::Absent, |level| Part::Known(level, basis))
    }
}

/// Returns the tones of the modulator family; `lines` stand in the order of `family`.
///
/// # Errors
/// `ExactError` beyond 127 bits.
pub fn family_candidates(
    scene: &Scene,
    family: &[FamilyTone],
    lines: &[LineLevel],
) -> Result<Vec<Candidate>, ExactError> {
    let mut candidates = Vec::with_capacity(family.len());
    for (tone, line) in family.iter().zip(lines) {
        let share =
            Exact::new(i128::from(tone.residue.unsigned_abs()), i128::from(scene.placement.word.modulus.get()))?;
        let offset = Frequency::from_hz(share.times(&scene.pfd.hz())?);
        if !scene.in_span(offset) {
            continue;
        }
        let (origin, label) = if tone.is_boundary {
            (Origin::Boundary, Label::Boundary(tone.p, tone.harmonic))
        } else {
            (Origin::Fractional, Label::Multiple(tone.harmonic))
        };
        let mut candidate = Candidate::new(origin, label, offset);
        candidate.harmonic = Some(tone.harmonic);
        candidate.residue = Some(tone.residue);
        candidate.boundary = tone.is_boundary.then_some((tone.p, tone.harmonic));
        candidate.coupling = scene.coupling(offset, &tone.couplings, |mechanism| mechanism != Mechanism::Output);
        candidate.modulator = line.modulator.clone();
        candidate.nonlinearity = line.nonlinearity.clone();
        candidate.level_uncertainty_db = line.uncertainty_db;
        candidates.push(candidate);
    }
    Ok(candidates)
}

/// Returns the tones of the raw reference, where it differs from the PFD frequency: board crosstalk knows no R.
///
/// # Errors
/// `ExactError` beyond 127 bits.
pub fn raw_reference_candidates(scene: &Scene) -> Result<Vec<Candidate>, ExactError> {
    let reference = scene.plan.reference.frequency;
    let mut candidates: Vec<Candidate> = Vec::new();
    if reference == scene.pfd {
        return Ok(candidates);
    }
    for q in 1..=scene.plan.boundary.largest_q {
        let near = nearest_fraction(scene.placement.vco, reference, q)?;
        let offset = near.tone_offset();
        let known = candidates.iter().any(|candidate| candidate.offset == offset);
        if !near.lowest_terms || offset.hz().sign() == 0 || known || !scene.in_span(offset) {
            continue;
        }
        let mut candidate = Candidate::new(Origin::Boundary, Label::ReferenceBoundary(near.p, near.q), offset);
        candidate.harmonic = Some(q);
        candidate.boundary = Some((near.p, q));
        let order = CouplingOrder { q, order: 1, base_residue: 0 };
        candidate.coupling = scene.coupling(offset, &[order], |mechanism| mechanism == Mechanism::Tuning);
        candidates.push(candidate);
    }
    Ok(candidates)
}

/// Returns the tone of the reference against the output itself: no loop and no divider act on it.
///
/// # Errors
/// `ExactError` beyond 127 bits.
pub fn output_candidate(scene: &Scene) -> Result<Option<Candidate>, ExactError> {
    let near = nearest_fraction(scene.placement.achieved, scene.plan.reference.frequency, 1)?;
    let offset = near.tone_offset();
    if offset.hz().sign() == 0 || !scene.in_span(offset) {
        return Ok(None);
    }
    let mut candidate = Candidate::new(Origin::Boundary, format!("output near {} × reference", near.p), offset);
    candidate.harmonic = Some(1);
    candidate.boundary = Some((near.p, 1));
    candidate.after_loop = true;
    let order = CouplingOrder { q: 1, order: 1, base_residue: 0 };
    candidate.coupling = scene.coupling(offset, &[order], |mechanism| mechanism == Mechanism::Output);
    Ok(Some(candidate))
}

/// Returns the tones of the other clocks on the board.
///
/// # Errors
/// `ExactError` beyond 127 bits.
pub fn clock_candidates(scene: &Scene) -> Result<Vec<Candidate>, ExactError> {
    let carriers = Carriers { vco: scene.placement.vco, output: scene.placement.achieved, pfd: scene.pfd };
    let span = Frequency::from_whole_hz(floor_to_hz(scene.plan.analysis.span_hz));
    let mut candidates = Vec::new();
    for (index, clock) in scene.plan.clocks.iter().enumerate() {
        let anchor = scene.clock_anchors.get(index).and_then(Option::as_ref);
        for tone in clock_tones(clock.frequency, &carriers, span)? {
            let label = format!("{} × {} {}", clock.name, tone.harmonic, tone.path.word());
            let mut candidate = Candidate::new(Origin::Clock, label, tone.offset);
            candidate.harmonic = Some(tone.harmonic);
            candidate.after_loop = tone.path == ClockPath::Output;
            candidate.clock = clock_level(scene, clock, anchor, (tone.path, tone.harmonic, tone.offset));
            candidates.push(candidate);
        }
    }
    Ok(candidates)
}

/// Returns the level of a clock tone: known only along the path that the clock's own anchor was taken on.
fn clock_level(
    scene: &Scene,
    clock: &Clock,
    anchor: Option<&AnchorLevel>,
    (path, harmonic, offset): (ClockPath, u64, Frequency),
) -> Part {
    let Some(anchor) = anchor else {
        return Part::Unknown(format!("clock \"{}\" has no anchor", clock.name));
    };
    let matching = match anchor.mechanism {
        Mechanism::Detector => ClockPath::Detector,
        Mechanism::Tuning => ClockPath::Vco,
        Mechanism::Output => ClockPath::Output,
    };
    if matching != path {
        return Part::Unknown(format!("the anchor of clock \"{}\" was taken {}", clock.name, matching.word()));
    }
    let here = (scene.transfer)(offset.to_f64_hz());
    anchor.level_dbc_at(harmonic, &here).map_or(Part::Absent, |level| Part::Known(level, anchor.basis))
}

/// Returns the tones at multiples of the PFD frequency; `level_of(h)` is the level at the output.
///
/// # Errors
/// `ExactError` beyond 127 bits.
pub fn reference_candidates(scene: &Scene, level_of: impl Fn(u64) -> Part) -> Result<Vec<Candidate>, ExactError> {
    (1..=REFERENCE_HARMONICS)
        .map(|harmonic| {
            let offset = Frequency::from_hz(scene.pfd.hz().times(&Exact::from_integer(i128::from(harmonic)))?);
            let mut candidate = Candidate::new(Origin::Reference, Label::Pfd(harmonic), offset);
            candidate.harmonic = Some(harmonic);
            candidate.leakage = level_of(harmonic);
            Ok(candidate)
        })
        .collect()
}

/// Returns a span rounded down to whole hertz: the exact comparison then never lets a tone beyond it in.
fn floor_to_hz(span_hz: f64) -> i128 {
    #[allow(clippy::cast_possible_truncation, reason = "the clamp keeps the value inside 64 bits")]
    let whole = span_hz.floor().clamp(0.0, 1e18) as i128;
    whole
}
