//! One channel through all stages, in order.

use crate::base::{Basis, Exact, Frequency};
use crate::loop_model::{ChargeCurve, ChargeTerms, LoopResponse, reference_tone_dbc, static_charge_cycles};
use crate::modulator::period;
use crate::plan::{ChannelGroup, MismatchPoints, Plan};
use crate::spectrum::{divided_dbc, sideband_dbc};
use crate::tones::{Charge, FamilyTone, modulator_family, nearest_fraction};

use super::candidate::{Candidate, Part, Position, gather, to_tone};
use super::lines::{FamilyLines, Line, LineInput, Scratch, family_lines, short_lattice};
use super::listing::{
    LineLevel, Scene, clock_candidates, family_candidates, output_candidate, raw_reference_candidates,
    reference_candidates,
};
use super::noise::{ChannelNoise, channel_noise};
use super::placement::{Placement, place};
use super::result::{BoundaryNear, ChannelResult, Method, Origin, Tone};
use super::setup::{AssessError, Setup, gain_at, interpolate, transfer_of};
use super::tolerance::{Tolerances, within};
use super::verdict::{Evidence, MaskState, judge};
use super::victims::{hit, limit_dbc};
use super::zone::Zone;

/// Parts below this level have no meaning in double precision and are taken as absent \[dBc\].
const NO_LEVEL_DBC: f64 = -200.0;
/// Modulator lines above this level, within `STRONG_LINE_REACH` unity-gain frequencies, move the VCO so much that the
/// static detector model no longer holds \[dBc\].
const STRONG_LINE_DBC: f64 = -40.0;
/// See `STRONG_LINE_DBC`.
const STRONG_LINE_REACH: f64 = 3.0;
/// Sub-fractional lines listed.
const SUB_FRACTIONAL_LISTED: usize = 5;
/// Level above which the small-angle sideband formula is off by more than 0.1 dB \[dBc\].
const SMALL_ANGLE_DBC: f64 = -20.0;

impl Setup<'_> {
    /// Returns the result of channel `index` of a group.
    ///
    /// # Errors
    /// `AssessError` for a channel that does not exist, cannot be placed, or whose loop is unstable.
    pub fn assess_index(&self, group: usize, index: u64, scratch: &mut Scratch) -> Result<ChannelResult, AssessError> {
        let found = self.plan().groups.get(group).and_then(|g| g.channels.get(index).map(|channel| (g, channel)));
        let Some((_, channel)) = found else { return Err(AssessError::NoSuchChannel { group, index }) };
        self.assess(group, index, channel, scratch)
    }

    /// Returns the result of a channel frequency under the settings of a group; `index` is its place in the group, or
    /// the group's length for a frequency off the raster.
    ///
    /// # Errors
    /// As [`Setup::assess_index`].
    pub fn assess(
        &self,
        group: usize,
        index: u64,
        channel: Frequency,
        scratch: &mut Scratch,
    ) -> Result<ChannelResult, AssessError> {
        let plan = self.plan();
        let settings = plan.groups.get(group).ok_or(AssessError::NoSuchChannel { group, index })?;
        let placement = place(plan, settings, channel)?;
        let mut result = identity(self, settings, (group, index, channel), &placement);
        if placement.illegal.is_empty() {
            Legal { setup: self, group: settings, channel, placement: &placement }.fill(&mut result, scratch)?;
        }
        let evidence = Evidence {
            illegal: &result.illegal,
            word: Some((placement.word.k, placement.word.modulus.get())),
            tones: &result.tones,
            harmonics: plan.boundary.harmonics,
            mask: if settings.limits.spur.is_some() { MaskState::Given } else { MaskState::Absent },
            margin_db: settings.limits.margin_db,
            phase_limit_deg: settings.limits.phase_error_deg.filter(|_| result.legal),
            phase_error_deg: result.phase_error_with_tones_deg,
            phase_error_known_deg: result.phase_error_known_deg,
        };
        let (verdict, reasons) = judge(&evidence);
        let range = Tolerances::of(plan).and_then(|tolerances| within(&evidence, &tolerances, &result));
        result.verdict = verdict;
        result.reasons = reasons;
        if let Some((best, worst)) = range.filter(|(best, worst)| best != worst) {
            result.warnings.push(format!(
                "within the stated tolerances the verdict ranges from {} to {}",
                best.word(),
                worst.word()
            ));
        }
        result.verdict_best = range.map(|(best, _)| best);
        result.verdict_worst = range.map(|(_, worst)| worst);
        Ok(result)
    }
}

/// Returns a result that holds the channel's place and word, and nothing yet of tones and noise.
fn identity(
    setup: &Setup,
    group: &ChannelGroup,
    (group_index, index, channel): (usize, u64, Frequency),
    placement: &Placement,
) -> ChannelResult {
    let plan = setup.plan();
    let word = placement.word;
    let (k_reduced, m_reduced) = word.reduced();
    let length = period(&placement.modulator);
    ChannelResult {
        group: group.name.clone(),
        group_index,
        index,
        channel_hz: channel.to_f64_hz(),
        channel,
        injection_hz: group.injection.to_f64_hz(),
        output_hz: placement.output.to_f64_hz(),
        output: placement.output,
        achieved_hz: Some(placement.achieved.to_f64_hz()),
        error_hz: Some(placement.error.to_f64_hz()),
        error_ppb: placement.error.hz().over(&placement.output.hz()).ok().map(|ratio| ratio.to_f64() * 1e9),
        vco_hz: Some(placement.vco.to_f64_hz()),
        reference_hz: plan.reference.frequency.to_f64_hz(),
        doubler: plan.reference.doubler,
        reference_divider: plan.reference.divider,
        pfd_hz: setup.pfd().to_f64_hz(),
        output_divider: Some(placement.output_divider),
        legal: placement.illegal.is_empty(),
        illegal: placement.illegal.clone(),
        n: Some(word.n),
        k: Some(word.k),
        m: Some(word.modulus.get()),
        k_reduced: Some(k_reduced),
        m_reduced: Some(m_reduced),
        period: length.length,
        period_is_exact: length.is_exact,
        structure: plan.modulator.settings.structure,
        order: plan.modulator.settings.order,
        seeds: placement.modulator.seeds().to_vec(),
        seeds_reduced: placement.modulator.seeds_reduced(),
        unity_gain_hz: None,
        phase_margin_deg: None,
        closed_loop_3db_hz: None,
        peaking_db: None,
        tuning_v: placement.tuning_v,
        guard_hz: None,
        loop_edge_hz: None,
        boundary: None,
        boundaries: Vec::new(),
        tones: Vec::new(),
        unknown_tones: 0,
        tones_below_floor: 0,
        method: Method::ClosedForm,
        phase_error_deg: None,
        phase_error_with_tones_deg: None,
        phase_error_known_deg: None,
        noise_unknown: Vec::new(),
        jitter_s: None,
        residual_fm_hz: None,
        evm_percent: None,
        verdict: super::result::Verdict::Clear,
        verdict_best: None,
        verdict_worst: None,
        reasons: Vec::new(),
        warnings: Vec::new(),
    }
}

/// A channel with a legal word, on its way through the stages.
pub(super) struct Legal<'a> {
    /// The plan made ready.
    pub setup: &'a Setup<'a>,
    /// The channel's group.
    pub group: &'a ChannelGroup,
    /// The channel.
    pub channel: Frequency,
    /// Its word.
    pub placement: &'a Placement,
}

impl Legal<'_> {
    fn plan(&self) -> &Plan {
        self.setup.plan()
    }

    /// Fills in loop, boundaries, tones and noise.
    fn fill(&self, result: &mut ChannelResult, scratch: &mut Scratch) -> Result<(), AssessError> {
        let response = self
            .setup
            .response(self.placement)
            .map_err(|source| AssessError::Loop { place: format!("channel {}", self.channel), source })?;
        let zone = Zone::of(self.plan(), self.setup.pfd(), &response);
        result.unity_gain_hz = response.unity_gain_hz();
        result.phase_margin_deg = response.phase_margin_deg();
        result.closed_loop_3db_hz = response.closed_loop_3db_hz();
        result.peaking_db = response.peaking_db();
        result.loop_edge_hz = zone.edge_hz;
        result.guard_hz = zone.guard_hz();
        result.warnings.extend(response.warnings());
        self.fill_boundaries(result, &zone)?;
        let lines = self.lines(result.pfd_hz, scratch)?;
        result.method = lines.as_ref().map_or(Method::ClosedForm, |(_, lines)| lines.method);
        let candidates = self.candidates(result, &response, lines.as_ref())?;
        self.fill_tones(result, candidates, &zone);
        let noise = channel_noise(
            self.setup,
            self.group,
            self.placement,
            &response,
            lines.as_ref().map(|(_, lines)| lines),
            &result.tones,
        );
        fill_noise(result, &noise, self.placement);
        Ok(())
    }

    /// Lists the boundaries within guard or edge, and the nearest of the comparison family.
    fn fill_boundaries(&self, result: &mut ChannelResult, zone: &Zone) -> Result<(), AssessError> {
        let exact = |source| AssessError::Exact { channel: self.channel, source };
        let reference = self.plan().reference.frequency;
        let mut found = Vec::new();
        for q in 1..=self.plan().boundary.largest_q {
            let mut families = Vec::new();
            if self.placement.word.k != 0 {
                families.push(("comparison", self.placement.vco, self.setup.pfd()));
            }
            if reference != self.setup.pfd() {
                families.push(("reference", self.placement.vco, reference));
            }
            if q == 1 {
                families.push(("output", self.placement.achieved, reference));
            }
            for (family, frequency, base) in families {
                let near = nearest_fraction(frequency, base, q).map_err(exact)?;
                let offset = near.tone_offset();
                if near.lowest_terms && offset.hz().sign() > 0 {
                    let near = BoundaryNear {
                        family,
                        p: near.p,
                        q,
                        tone_offset_hz: offset.to_f64_hz(),
                        vco_distance_hz: near.distance_hz(),
                        inside_guard: zone.in_guard(offset),
                        inside_loop: zone.in_loop(offset),
                    };
                    found.push((offset, near));
                }
            }
        }
        found.sort_by(|(a, near_a), (b, near_b)| a.cmp(b).then(near_a.q.cmp(&near_b.q)));
        result.boundary = found.iter().map(|(_, near)| near).find(|near| near.family == "comparison").cloned();
        result.boundaries =
            found.into_iter().map(|(_, near)| near).filter(|near| near.inside_guard || near.inside_loop).collect();
        Ok(())
    }

    /// Returns the tones of the modulator family and their lines; `None` where the modulator is held.
    pub fn lines(
        &self,
        pfd_hz: f64,
        scratch: &mut Scratch,
    ) -> Result<Option<(Vec<FamilyTone>, FamilyLines)>, AssessError> {
        let placement = self.placement;
        if placement.modulator.is_held() {
            return Ok(None);
        }
        let plan = self.plan();
        let word = placement.word;
        let family =
            modulator_family(word.n, word.k, word.modulus.get(), plan.boundary.largest_q, plan.boundary.harmonics);
        let curve = self.charge_curve();
        let at = |p: f64| curve.as_ref().map_or(p, |curve| curve.at(p));
        let charge = curve.as_ref().map(|curve| Charge::new(&at, curve.kinks()));
        let detector = &plan.detector;
        let drained = detector.offset_current_a + detector.leakage_a.unwrap_or(0.0);
        let length = period(&placement.modulator);
        let highest = family.iter().map(|tone| tone.harmonic).max().unwrap_or(1);
        let known_curve = self.setup.tabulated_curve(placement, short_lattice(&placement.modulator, highest));
        let input = LineInput {
            modulator: &placement.modulator,
            period: &length,
            family: &family,
            charge,
            target_cycles: static_charge_cycles(drained, detector.current_a, placement.divider_ratio()),
            record: plan.analysis.record,
            pfd_hz,
            vco_hz: placement.vco.to_f64_hz(),
            known_curve: known_curve.as_ref(),
        };
        let lines = family_lines(&input, self.setup.fft(), scratch)
            .map_err(|source| AssessError::Lines { channel: self.channel, source })?;
        Ok(Some((family, lines)))
    }

    /// Returns the charge curve of the channel; `None` while the mismatch is unknown.
    pub fn charge_curve(&self) -> Option<ChargeCurve> {
        charge_curve(self.plan(), self.placement.vco.to_f64_hz(), self.placement.tuning_v)
    }

    /// Returns every tone of the channel before it is judged.
    fn candidates(
        &self,
        result: &mut ChannelResult,
        response: &LoopResponse,
        lines: Option<&(Vec<FamilyTone>, FamilyLines)>,
    ) -> Result<Vec<Candidate>, AssessError> {
        let exact = |source| AssessError::Exact { channel: self.channel, source };
        let output_divider = self.placement.output_divider;
        let transfer = |offset_hz: f64| transfer_of(response, offset_hz, output_divider);
        let scene = Scene {
            plan: self.plan(),
            pfd: self.setup.pfd(),
            placement: self.placement,
            anchors: self.setup.anchors(),
            clock_anchors: self.setup.clock_anchors(),
            transfer: &transfer,
        };
        let mut candidates = Vec::new();
        if let Some((family, lines)) = lines {
            let levels = self.levels(result, response, family, lines);
            candidates.extend(family_candidates(&scene, family, &levels).map_err(exact)?);
            candidates.extend(self.sub_fractional(response, lines, result.pfd_hz)?);
        }
        candidates.extend(raw_reference_candidates(&scene).map_err(exact)?);
        candidates.extend(output_candidate(&scene).map_err(exact)?);
        candidates.extend(clock_candidates(&scene).map_err(exact)?);
        candidates.extend(reference_candidates(&scene, |harmonic| self.leakage_part(harmonic)).map_err(exact)?);
        Ok(gather(candidates))
    }

    /// Returns the level of one line behind the loop at the output.
    fn line_part(&self, amplitude_cycles: f64, basis: Basis) -> Part {
        let level = sideband_dbc(amplitude_cycles).map(|level| divided_dbc(level, self.placement.output_divider));
        match level {
            Some(level) if level > NO_LEVEL_DBC => Part::Known(level, basis),
            _ => Part::Absent,
        }
    }

    /// Returns the levels of the family's lines at the output, and notes where the static model does not hold.
    fn levels(
        &self,
        result: &mut ChannelResult,
        response: &LoopResponse,
        family: &[FamilyTone],
        lines: &FamilyLines,
    ) -> Vec<LineLevel> {
        let plan = self.plan();
        let modulus = self.placement.word.modulus.get() as f64;
        let offset_hz = |tone: &FamilyTone| tone.residue.unsigned_abs() as f64 / modulus * result.pfd_hz;
        let loop_basis = self.loop_basis();
        let detector_basis = loop_basis.max(plan.basis_of("detector.mismatch"));
        let reach_hz = response.unity_gain_hz().or(response.closed_loop_3db_hz()).map(|f| STRONG_LINE_REACH * f);
        // Size of the loop's gain at each tone, once.
        let places: Vec<(f64, f64)> =
            family.iter().map(offset_hz).map(|offset| (offset, response.closed_loop(offset).norm())).collect();
        let is_strong = |(offset, gain): &(f64, f64), line: &Line| {
            reach_hz.is_some_and(|reach| *offset <= reach)
                && sideband_dbc(line.modulator.norm() * gain).is_some_and(|level| level > STRONG_LINE_DBC)
        };
        let strong = places.iter().zip(&lines.family).any(|(place, line)| is_strong(place, line));
        if strong {
            result.warnings.push(format!(
                "a modulator line above {STRONG_LINE_DBC} dBc lies within {STRONG_LINE_REACH} loop bandwidths: the VCO follows it, so the detector's nonlinearity is not claimed and the modulator line alone is given"
            ));
        }
        if plan.modulator.settings.order >= 4 {
            result.warnings.push(
                "orders 4 and 5: what the width of the detector's pulses adds beyond its second order is not in the model; lines near -90 dBc may be off"
                    .to_owned(),
            );
        }
        places
            .iter()
            .zip(&lines.family)
            .map(|((_, gain), line)| {
                let modulator = self.line_part(line.modulator.norm() * gain, loop_basis);
                let nonlinearity = match line.nonlinearity {
                    _ if strong => Part::NotClaimed("the VCO follows a strong modulator line".to_owned()),
                    None => Part::Unknown("pump mismatch unknown".to_owned()),
                    Some(value) => self.line_part(value.norm() * gain, detector_basis),
                };
                LineLevel { modulator, nonlinearity, uncertainty_db: line.uncertainty_db }
            })
            .collect()
    }

    /// Returns the weakest basis among the inputs of the loop's response.
    fn loop_basis(&self) -> Basis {
        let plan = self.plan();
        ["oscillator.gain", "detector.current"]
            .into_iter()
            .map(|key| plan.basis_of(key))
            .max()
            .unwrap_or(Basis::Default)
    }

    /// Returns the strongest lines of an exact period that are no multiple of K/M.
    fn sub_fractional(
        &self,
        response: &LoopResponse,
        lines: &FamilyLines,
        pfd_hz: f64,
    ) -> Result<Vec<Candidate>, AssessError> {
        let Some(period) = lines.period else { return Ok(Vec::new()) };
        let plan = self.plan();
        let (loop_basis, detector_basis) =
            (self.loop_basis(), self.loop_basis().max(plan.basis_of("detector.mismatch")));
        let offset_of = |bin: u64| bin as f64 / period as f64 * pfd_hz;
        let size = |line: &Line| (line.modulator + line.nonlinearity.unwrap_or_default()).norm();
        let mut ranked: Vec<(f64, u64, Line)> = lines
            .others
            .iter()
            .take_while(|other| offset_of(other.bin) <= plan.analysis.span_hz)
            .filter(|other| size(&other.line) > 1e-13)
            .map(|other| {
                let level = size(&other.line) * response.closed_loop(offset_of(other.bin)).norm();
                (level, other.bin, other.line)
            })
            .collect();
        ranked.sort_by(|a, b| b.0.total_cmp(&a.0).then(a.1.cmp(&b.1)));
        ranked.truncate(SUB_FRACTIONAL_LISTED);
        ranked
            .into_iter()
            .map(|(_, bin, line)| {
                let offset = Exact::new(i128::from(bin), i128::from(period))
                    .and_then(|share| share.times(&self.setup.pfd().hz()))
                    .map_err(|source| AssessError::Exact { channel: self.channel, source })?;
                let gain = response.closed_loop(offset_of(bin)).norm();
                let label = format!("{bin}/{period} of the PFD frequency");
                let mut candidate = Candidate::new(Origin::SubFractional, label, Frequency::from_hz(offset));
                candidate.level_uncertainty_db = line.uncertainty_db;
                candidate.modulator = self.line_part(line.modulator.norm() * gain, loop_basis);
                candidate.nonlinearity = match line.nonlinearity {
                    None => Part::Unknown("pump mismatch unknown".to_owned()),
                    Some(value) => self.line_part(value.norm() * gain, detector_basis),
                };
                Ok(candidate)
            })
            .collect()
    }

    /// Returns the part of leakage and offset current in the tone at a harmonic of the PFD frequency.
    fn leakage_part(&self, harmonic: u64) -> Part {
        let plan = self.plan();
        let Some(leakage_a) = plan.detector.leakage_a else {
            return Part::Unknown("leakage unknown".to_owned());
        };
        let Some(network) = self.setup.network() else {
            return Part::Unknown("a measured loop response does not give the filter's impedance".to_owned());
        };
        let vco_hz = self.placement.vco.to_f64_hz();
        let level = reference_tone_dbc(
            network,
            leakage_a + plan.detector.offset_current_a,
            plan.detector.current_a,
            gain_at(&plan.oscillator.gain, vco_hz),
            self.setup.pfd().to_f64_hz(),
            harmonic,
        );
        match level.map(|level| divided_dbc(level, self.placement.output_divider)) {
            Some(level) => Part::Known(level, plan.basis_of("detector.leakage").max(self.loop_basis())),
            None => Part::Absent,
        }
    }

    /// Judges positions and limits, drops what lies below the floor, and counts.
    fn fill_tones(&self, result: &mut ChannelResult, candidates: Vec<Candidate>, zone: &Zone) {
        let floor = self.plan().analysis.tone_floor_dbc;
        for candidate in candidates {
            if candidate.is_below(floor) {
                result.tones_below_floor += 1;
                continue;
            }
            let offset_hz = candidate.offset.to_f64_hz();
            let position = Position {
                inside_guard: zone.in_guard(candidate.offset),
                inside_loop: zone.in_loop(candidate.offset),
                limit_dbc: limit_dbc(self.plan(), self.group, result.output_hz, offset_hz),
            };
            let mut tone: Tone = to_tone(candidate, position);
            tone.victims = hit(self.plan(), result.output_hz, offset_hz).map(|victim| victim.name.clone()).collect();
            if tone.level_dbc.is_some_and(|level| level > SMALL_ANGLE_DBC) {
                result.warnings.push(format!(
                    "a tone above {SMALL_ANGLE_DBC} dBc: the small-angle sideband formula is off by more than 0.1 dB"
                ));
            }
            result.unknown_tones += usize::from(tone.level_dbc.is_none());
            result.tones.push(tone);
        }
        result.warnings.sort();
        result.warnings.dedup();
    }
}

/// Returns the charge curve at a VCO frequency \[Hz\] and tuning voltage \[V\]; `None` while the mismatch is unknown.
pub(super) fn charge_curve(plan: &Plan, vco_hz: f64, tuning_v: Option<f64>) -> Option<ChargeCurve> {
    let detector = &plan.detector;
    if let Some(table) = &detector.table {
        return Some(ChargeCurve::from_table(table, detector.current_a, vco_hz));
    }
    let mismatch = match detector.mismatch.as_ref()? {
        MismatchPoints::Constant(value) => *value,
        MismatchPoints::Table(points) => interpolate(points, tuning_v?),
    };
    Some(ChargeCurve::from_terms(&ChargeTerms {
        mismatch,
        dead_zone_cycles: detector.dead_zone_s * vco_hz,
        quadratic_per_cycle: detector.quadratic_per_cycle,
        cubic_per_cycle2: detector.cubic_per_cycle2,
    }))
}

/// Copies the noise figures into the result.
fn fill_noise(result: &mut ChannelResult, noise: &ChannelNoise, placement: &Placement) {
    let carrier_hz = placement.achieved.to_f64_hz();
    result.phase_error_deg = noise.total.map(|figures| figures.phase_deg());
    result.phase_error_with_tones_deg = noise.total_with_tones.map(|figures| figures.phase_deg());
    result.phase_error_known_deg = Some(noise.known_with_tones.phase_deg());
    result.jitter_s = noise.total_with_tones.map(|figures| figures.jitter_s(carrier_hz));
    result.residual_fm_hz = noise.total_with_tones.map(|figures| figures.residual_fm_hz());
    result.evm_percent = noise.total_with_tones.map(|figures| figures.evm_percent());
    result.noise_unknown.clone_from(&noise.unknown);
}
