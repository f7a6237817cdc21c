//! What all channels of a plan share: the filter, the anchors, the FFT plans.

use std::collections::BTreeMap;

use rayon::prelude::*;

use crate::base::{Assumption, Basis, Exact, ExactError, Frequency};
use crate::loop_model::{FilterComponents, FilterNetwork, LoopModelError, LoopPoint, LoopResponse, OscillatorNoise};
use crate::plan::{Anchor, AnchorPlace, Gain, LoopPlan, Plan};
use crate::spectrum::FftStage;
use crate::tones::{AnchorLevel, Mechanism, Transfer, fitted_anchors, nearest_fraction};

use super::lines::{LinesError, Scratch};
use super::placement::{Placement, PlacementError, place};
use super::verdict::hertz;

/// Distance from the fit above which anchors of one coupling are said not to agree \[dB\].
const WIDE_SPREAD_DB: f64 = 3.0;

/// Why a plan is refused as a whole.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum AssessError {
    /// No channel has a legal word.
    #[error("no channel has a legal word; {channels} channels, most often: {limit} ({count} channels)")]
    NoLegalChannel {
        /// Channels in the plan.
        channels: u64,
        /// The limit that is missed most often.
        limit: String,
        /// Channels that miss it.
        count: u64,
    },
    /// A channel cannot be placed.
    #[error(transparent)]
    Placement(#[from] PlacementError),
    /// The loop cannot be set up, or is unstable.
    #[error("loop at {place}: {source}")]
    Loop {
        /// Which channel or `the design divider`.
        place: String,
        /// What failed.
        source: LoopModelError,
    },
    /// The lines of a channel cannot be computed.
    #[error("channel {channel}: {source}")]
    Lines {
        /// The channel.
        channel: Frequency,
        /// What failed.
        source: LinesError,
    },
    /// Exact arithmetic ran out of bits.
    #[error("channel {channel}: {source}")]
    Exact {
        /// The channel.
        channel: Frequency,
        /// What failed.
        source: ExactError,
    },
    /// A measured response that is asked for at another PFD frequency.
    #[error("the measured response belongs to a PFD frequency of {measured}; at {asked} it is unknown")]
    MeasuredElsewhere {
        /// PFD frequency of the board.
        measured: Frequency,
        /// PFD frequency asked for.
        asked: Frequency,
    },
    /// A channel that the plan does not hold.
    #[error("group {group} has no channel {index}")]
    NoSuchChannel {
        /// Group index from 0.
        group: usize,
        /// Channel index from 0.
        index: u64,
    },
}

/// The source of every channel's loop response.
#[derive(Debug, Clone)]
pub enum LoopSource {
    /// A filter network.
    Network(FilterNetwork),
    /// A measured response, the same for all channels.
    Measured(LoopResponse),
}

/// A plan made ready for its channels.
#[derive(Debug)]
pub struct Setup<'p> {
    plan: &'p Plan,
    pfd: Frequency,
    source: LoopSource,
    components: Option<FilterComponents>,
    design_divider: f64,
    design_response: LoopResponse,
    carried: Vec<Option<AnchorLevel>>,
    anchors: Vec<AnchorLevel>,
    clock_anchors: Vec<Option<AnchorLevel>>,
    fft: FftStage,
    warnings: Vec<String>,
    fits: Vec<Assumption>,
}

impl<'p> Setup<'p> {
    /// Returns the plan made ready: every channel placed once, the filter designed, the anchors carried to their places.
    ///
    /// # Errors
    /// `AssessError` when no channel is legal, the loop is unstable, or exact arithmetic runs out of bits.
    pub fn new(plan: &'p Plan) -> Result<Self, AssessError> {
        let (smallest, largest) = legal_ratios(plan)?;
        let pfd =
            plan.reference.pfd().map_err(|source| AssessError::Exact { channel: plan.reference.frequency, source })?;
        let design_divider = match &plan.loop_plan {
            LoopPlan::Designed(design) => design.design_divider.unwrap_or_else(|| (smallest * largest).sqrt()),
            LoopPlan::Components(_) | LoopPlan::Measured(_) => (smallest * largest).sqrt(),
        };
        let at_design = |source| AssessError::Loop { place: "the design divider".to_owned(), source };
        let gain = gain_at(&plan.oscillator.gain, design_divider * pfd.to_f64_hz());
        let (source, components) = match &plan.loop_plan {
            LoopPlan::Designed(design) => {
                let components = design.components(plan.detector.current_a, gain, design_divider).map_err(at_design)?;
                (LoopSource::Network(FilterNetwork::new(&components).map_err(at_design)?), Some(components))
            }
            LoopPlan::Components(components) => {
                (LoopSource::Network(FilterNetwork::new(components).map_err(at_design)?), Some(*components))
            }
            LoopPlan::Measured(table) => {
                (LoopSource::Measured(LoopResponse::from_table(table, pfd.to_f64_hz()).map_err(at_design)?), None)
            }
        };
        let design_response = response_of(plan, &source, design_divider, pfd).map_err(at_design)?;
        let mut setup = Self {
            plan,
            pfd,
            source,
            components,
            design_divider,
            warnings: design_response.warnings(),
            design_response,
            carried: Vec::new(),
            anchors: Vec::new(),
            clock_anchors: Vec::new(),
            fft: FftStage::new(),
            fits: Vec::new(),
        };
        setup.carry_anchors()?;
        setup.warnings.extend(unused(plan));
        Ok(setup)
    }

    /// Returns another plan made ready on the hardware of this one: its filter and its coupling levels stay as they are
    /// here, whatever word, PFD frequency or modulator the other plan sets.
    ///
    /// # Errors
    /// As [`Setup::new`]; `MeasuredElsewhere` for a measured response at another PFD frequency.
    pub fn on_same_board<'q>(&self, plan: &'q Plan) -> Result<Setup<'q>, AssessError> {
        let (smallest, largest) = legal_ratios(plan)?;
        let pfd =
            plan.reference.pfd().map_err(|source| AssessError::Exact { channel: plan.reference.frequency, source })?;
        if matches!(self.source, LoopSource::Measured(_)) && pfd != self.pfd {
            return Err(AssessError::MeasuredElsewhere { measured: self.pfd, asked: pfd });
        }
        let design_divider = (smallest * largest).sqrt();
        let design_response = response_of(plan, &self.source, design_divider, pfd)
            .map_err(|source| AssessError::Loop { place: "the middle of the channels".to_owned(), source })?;
        Ok(Setup {
            plan,
            pfd,
            source: self.source.clone(),
            components: self.components,
            design_divider,
            warnings: design_response.warnings(),
            design_response,
            carried: self.carried.clone(),
            anchors: self.anchors.clone(),
            clock_anchors: self.clock_anchors.clone(),
            fft: FftStage::new(),
            fits: self.fits.clone(),
        })
    }

    /// Returns the plan.
    #[must_use]
    pub fn plan(&self) -> &'p Plan {
        self.plan
    }

    /// Returns the PFD frequency.
    #[must_use]
    pub fn pfd(&self) -> Frequency {
        self.pfd
    }

    /// Returns the filter's components; `None` with a measured response.
    #[must_use]
    pub fn components(&self) -> Option<FilterComponents> {
        self.components
    }

    /// Returns the filter network; `None` with a measured response.
    #[must_use]
    pub fn network(&self) -> Option<&FilterNetwork> {
        match &self.source {
            LoopSource::Network(network) => Some(network),
            LoopSource::Measured(_) => None,
        }
    }

    /// Returns N + K/M of the design.
    #[must_use]
    pub fn design_divider(&self) -> f64 {
        self.design_divider
    }

    /// Returns the loop at the design divider.
    #[must_use]
    pub fn design_response(&self) -> &LoopResponse {
        &self.design_response
    }

    /// Returns the anchors in the order of the plan, as given, each with the loop's transfer where it was taken; `None`
    /// for one that has no place.
    #[must_use]
    pub fn carried_anchors(&self) -> &[Option<AnchorLevel>] {
        &self.carried
    }

    /// Returns the couplings: anchors of one path and q fitted to one, with the loop's transfer where the first was taken.
    #[must_use]
    pub fn anchors(&self) -> &[AnchorLevel] {
        &self.anchors
    }

    /// Returns the clocks' anchors, in the order of the plan's clocks.
    #[must_use]
    pub fn clock_anchors(&self) -> &[Option<AnchorLevel>] {
        &self.clock_anchors
    }

    /// Returns the shared FFT plans.
    #[must_use]
    pub fn fft(&self) -> &FftStage {
        &self.fft
    }

    /// Returns doubts about the plan as a whole.
    #[must_use]
    pub fn warnings(&self) -> &[String] {
        &self.warnings
    }

    /// Returns the buffers of one worker.
    #[must_use]
    pub fn scratch(&self) -> Scratch {
        Scratch::default()
    }

    /// Returns every input that the results rest on: the plan's, and what this stage assumes on top.
    #[must_use]
    pub fn assumptions(&self) -> Vec<Assumption> {
        let mut list = self.plan.assumptions.clone();
        let mut add = |key: &str, value: String, basis| {
            list.push(Assumption { key: key.to_owned(), value, basis, note: None });
        };
        if !matches!(&self.plan.loop_plan, LoopPlan::Designed(design) if design.design_divider.is_some()) {
            add(
                "loop.design_divider",
                format!("{:.6}, geometric mean over the legal channels", self.design_divider),
                Basis::Default,
            );
        }
        if self.plan.detector.leakage_a.is_none() {
            add(
                "detector.leakage",
                "0 A where the static phase offset is computed; the reference tone stays unknown".to_owned(),
                Basis::Default,
            );
        }
        list.extend(self.fits.iter().cloned());
        list.extend(self.extrapolated());
        list
    }

    /// Returns every stretch of offsets on which noise is carried beyond its points.
    fn extrapolated(&self) -> Vec<Assumption> {
        let (low_hz, high_hz) = self
            .plan
            .groups
            .iter()
            .map(|group| group.limits.integration_hz)
            .fold((f64::INFINITY, 0.0f64), |(low, high), limits| (low.min(limits.0), high.max(limits.1)));
        let oscillator = match &self.plan.oscillator.noise {
            Some(OscillatorNoise::Points(points)) => Some(points),
            Some(OscillatorNoise::Leeson { .. }) | None => None,
        };
        let sources = [
            ("reference.noise", self.plan.reference.noise.as_ref(), "the first segment's slope", "flat"),
            ("oscillator.noise", oscillator, "the first segment's slope, at least -30 dB a decade", "-20 dB a decade"),
        ];
        let mut list = Vec::new();
        for (key, points, below, above) in sources {
            let Some(points) = points else { continue };
            let first_hz = points.points().first().map_or(0.0, |point| point.0);
            for (from_hz, to_hz) in points.extrapolated_hz(low_hz, high_hz) {
                let rule = if to_hz <= first_hz { below } else { above };
                list.push(Assumption {
                    key: key.to_owned(),
                    value: format!("carried from {} to {} by {rule}", hertz(from_hz), hertz(to_hz)),
                    basis: Basis::Extrapolated,
                    note: None,
                });
            }
        }
        list
    }

    /// Returns the loop of another plan on this filter, at a divider and PFD frequency of its own.
    ///
    /// # Errors
    /// `LoopModelError`: an unstable loop above all.
    pub fn response_of(&self, plan: &Plan, divider: f64, pfd: Frequency) -> Result<LoopResponse, LoopModelError> {
        response_of(plan, &self.source, divider, pfd)
    }

    /// Returns the loop of a placed channel.
    ///
    /// # Errors
    /// `LoopModelError`: an unstable loop above all.
    pub fn response(&self, placement: &Placement) -> Result<LoopResponse, LoopModelError> {
        response_of(self.plan, &self.source, placement.divider_ratio(), self.pfd)
    }

    /// Carries every anchor to the place where it was taken; one that has no place is left out with a warning.
    fn carry_anchors(&mut self) -> Result<(), AssessError> {
        let mut carried = Vec::new();
        for (index, anchor) in self.plan.anchors.iter().enumerate() {
            let level = self.carried(anchor, None)?;
            if let Err(why) = &level {
                self.warnings.push(format!("anchor {} is not used: {why}", index + 1));
            }
            carried.push(level.ok());
        }
        let anchors: Vec<AnchorLevel> = carried.iter().copied().flatten().collect();
        self.carried = carried;
        let mut clock_anchors = Vec::new();
        for clock in &self.plan.clocks {
            let carried =
                clock.anchor.as_ref().map(|anchor| self.carried(anchor, Some(clock.frequency))).transpose()?;
            clock_anchors.push(match carried {
                Some(Ok(level)) => Some(level),
                Some(Err(why)) => {
                    self.warnings.push(format!("the anchor of clock \"{}\" is not used: {why}", clock.name));
                    None
                }
                None => None,
            });
        }
        let fitted = fitted_anchors(&anchors);
        for anchor in fitted.iter().filter(|anchor| anchor.count > 1) {
            let (mechanism, q) = (anchor.level.mechanism, anchor.level.q);
            let name = format!("{mechanism:?}").to_lowercase();
            let fit = format!(
                "{} anchors of one coupling fitted: {:.2} dBc where the first was taken, each within {:.2} dB of the fit",
                anchor.count, anchor.level.level_dbc, anchor.spread_db
            );
            if anchor.spread_db > WIDE_SPREAD_DB {
                self.warnings.push(format!("the anchors of {name}, q = {q}, do not agree: {fit}"));
            }
            self.fits.push(Assumption {
                key: format!("anchor ({name}, q = {q})"),
                value: fit,
                basis: anchor.level.basis,
                note: None,
            });
        }
        self.anchors = fitted.into_iter().map(|anchor| anchor.level).collect();
        self.clock_anchors = clock_anchors;
        Ok(())
    }

    /// Returns an anchor with the loop's transfer where it was taken, or why it has no such place.
    fn carried(&self, anchor: &Anchor, clock: Option<Frequency>) -> Result<Result<AnchorLevel, String>, AssessError> {
        let with = |taken_at| AnchorLevel {
            mechanism: anchor.mechanism,
            level_dbc: anchor.level_dbc,
            q: anchor.q,
            roll_off_db: anchor.roll_off_db,
            basis: anchor.basis,
            taken_at,
        };
        match anchor.place {
            AnchorPlace::Offset { offset, output_divider } => {
                let offset_hz = offset.to_f64_hz();
                Ok(Ok(with(transfer_of(&self.design_response, offset_hz, output_divider))))
            }
            AnchorPlace::Channel(channel) => {
                let group = self.plan.locate(channel, None).map_or(0, |(group, _)| group);
                let placement = place(self.plan, &self.plan.groups[group], channel)?;
                if let Some(miss) = placement.illegal.first() {
                    return Ok(Err(format!("its channel {channel} has no legal word ({})", miss.limit)));
                }
                let response = self
                    .response(&placement)
                    .map_err(|source| AssessError::Loop { place: format!("anchor channel {channel}"), source })?;
                let exact = |source| AssessError::Exact { channel, source };
                let offset = match (clock, anchor.mechanism) {
                    (None, Mechanism::Output) => {
                        nearest_fraction(placement.achieved, self.plan.reference.frequency, anchor.q)
                    }
                    (None, _) => nearest_fraction(placement.vco, self.pfd, anchor.q),
                    (Some(clock), Mechanism::Detector) => nearest_fraction(clock, self.pfd, 1),
                    (Some(clock), Mechanism::Tuning) => nearest_fraction(placement.vco, clock, 1),
                    (Some(clock), Mechanism::Output) => nearest_fraction(placement.achieved, clock, 1),
                }
                .map_err(exact)?
                .tone_offset()
                .to_f64_hz();
                if offset == 0.0 {
                    return Ok(Err(format!(
                        "its channel {channel} lies exactly on the boundary, where there is no tone"
                    )));
                }
                Ok(Ok(with(transfer_of(&response, offset, placement.output_divider))))
            }
        }
    }
}

/// Returns a doubt for each figure that is given but enters no result.
fn unused(plan: &Plan) -> Vec<String> {
    let detector = &plan.detector;
    [
        (
            detector.pump_noise_a_per_rthz.is_some(),
            "detector.pump_noise is not added: it is taken as inside detector.floor",
        ),
        (
            detector.reset_delay_s.is_some(),
            "detector.reset_delay enters no prediction: the static charge curve has no place for it",
        ),
    ]
    .into_iter()
    .filter(|(is_given, _)| *is_given)
    .map(|(_, text)| text.to_owned())
    .collect()
}

/// Returns what a loop does to a tone.
pub(super) fn transfer_of(response: &LoopResponse, offset_hz: f64, output_divider: u64) -> Transfer {
    Transfer {
        offset_hz,
        closed_loop: response.closed_loop(offset_hz).norm(),
        error: response.error(offset_hz).norm(),
        output_divider: output_divider as f64,
    }
}

/// Returns the tuning gain at a frequency: linear between points, end values held.
#[must_use]
pub fn gain_at(gain: &Gain, frequency_hz: f64) -> f64 {
    match gain {
        Gain::Constant(value) => *value,
        Gain::Table(points) => interpolate(points, frequency_hz),
    }
}

/// Returns the value at `x`: linear between points that rise in x, end values held.
pub fn interpolate(points: &[(f64, f64)], x: f64) -> f64 {
    let after = points.partition_point(|(at, _)| *at <= x);
    match (after.checked_sub(1).and_then(|i| points.get(i)), points.get(after)) {
        (Some((x0, y0)), Some((x1, y1))) => y0 + (y1 - y0) * (x - x0) / (x1 - x0),
        (Some((_, y)), None) | (None, Some((_, y))) => *y,
        (None, None) => f64::NAN,
    }
}

fn response_of(plan: &Plan, source: &LoopSource, divider: f64, pfd: Frequency) -> Result<LoopResponse, LoopModelError> {
    match source {
        LoopSource::Measured(response) => Ok(response.clone()),
        LoopSource::Network(network) => {
            let pfd_hz = pfd.to_f64_hz();
            let gain_hz_per_v = gain_at(&plan.oscillator.gain, divider * pfd_hz);
            LoopResponse::new(network, LoopPoint { current_a: plan.detector.current_a, gain_hz_per_v, divider, pfd_hz })
        }
    }
}

/// Returns the smallest and largest N + K/M over the legal channels.
fn legal_ratios(plan: &Plan) -> Result<(f64, f64), AssessError> {
    #[derive(Default)]
    struct Found {
        range: Option<(Exact, Exact)>,
        channels: u64,
        missed: BTreeMap<String, u64>,
    }
    let merge = |mut a: Found, b: Found| {
        a.range = match (a.range, b.range) {
            (Some((low_a, high_a)), Some((low_b, high_b))) => Some((low_a.min(low_b), high_a.max(high_b))),
            (range, None) | (None, range) => range,
        };
        a.channels += b.channels;
        for (limit, count) in b.missed {
            *a.missed.entry(limit).or_default() += count;
        }
        a
    };
    let mut all = Found::default();
    for group in &plan.groups {
        let found = (0..group.channels.len())
            .into_par_iter()
            .try_fold(Found::default, |mut found, index| {
                let Some(channel) = group.channels.get(index) else { return Ok(found) };
                let placement = place(plan, group, channel)?;
                found.channels += 1;
                if placement.illegal.is_empty() {
                    let ratio = placement.word.ratio();
                    let (low, high) = found.range.unwrap_or((ratio, ratio));
                    found.range = Some((low.min(ratio), high.max(ratio)));
                }
                for miss in placement.illegal {
                    *found.missed.entry(miss.limit).or_default() += 1;
                }
                Ok::<Found, AssessError>(found)
            })
            .try_reduce(Found::default, |a, b| Ok(merge(a, b)))?;
        all = merge(all, found);
    }
    match all.range {
        Some((low, high)) => Ok((low.to_f64(), high.to_f64())),
        None => {
            let (limit, count) = all.missed.into_iter().max_by_key(|(_, count)| *count).unwrap_or_default();
            Err(AssessError::NoLegalChannel { channels: all.channels, limit, count })
        }
    }
}
