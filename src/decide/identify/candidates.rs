//! Every mechanism with its exact position.

use serde::Serialize;

use super::IdentifyError;
use super::experiments::Shift;
use crate::assess::Placement;
use crate::base::{Exact, ExactError, Frequency};
use crate::modulator::period;
use crate::plan::Plan;
use crate::tones::{ClockPath, nearest_fraction};

/// Highest multiple of K/M that is looked at.
const FAMILY_HARMONICS: u64 = 64;
/// Highest denominator of raw-reference and output boundaries.
const OTHER_HARMONICS: u64 = 8;
/// Highest clock harmonic.
const CLOCK_HARMONICS: u64 = 20;
/// Highest harmonic of the PFD frequency.
const PFD_HARMONICS: u64 = 5;

/// What makes a tone, in order of how often it does.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Mechanism {
    /// A multiple of K/M: boundary coupling, detector nonlinearity or the modulator itself.
    Family,
    /// The raw reference against the VCO.
    RawReference,
    /// The reference against the output.
    Output,
    /// Another clock, with its path.
    Clock {
        /// Index in the plan's clocks.
        clock: usize,
        /// Path.
        #[serde(skip)]
        path: ClockPath,
    },
    /// A harmonic of the PFD frequency: leakage or offset current.
    PfdFrequency,
    /// A line of the modulator's period that is no multiple of K/M.
    SubFractional {
        /// Length of the period.
        period: u64,
    },
}

/// A mechanism that puts a tone into the window.
#[derive(Debug, Clone, Serialize)]
pub struct Cause {
    /// What makes the tone.
    pub mechanism: Mechanism,
    /// Its order: harmonic, boundary denominator, or line number.
    pub order: u64,
    /// Exact offset.
    pub offset: Frequency,
    /// Offset less the observed one \[Hz\].
    pub distance_hz: f64,
    /// The integers that prove the offset, in one line.
    pub proof: String,
    /// How the offset moves in each experiment.
    pub shifts: Vec<Shift>,
}

/// The exact frequencies a tone can depend on.
#[derive(Debug, Clone)]
pub(super) struct Situation {
    pub reference: Frequency,
    pub pfd: Frequency,
    pub vco: Frequency,
    pub output: Frequency,
    pub k: u64,
    pub m: u64,
    pub period: Option<u64>,
    pub clocks: Vec<Frequency>,
}

impl Situation {
    /// Returns the situation of a placed channel.
    pub fn of(plan: &Plan, placement: &Placement) -> Result<Self, ExactError> {
        let length = period(&placement.modulator);
        Ok(Self {
            reference: plan.reference.frequency,
            pfd: plan.reference.pfd()?,
            vco: placement.vco,
            output: placement.achieved,
            k: placement.word.k,
            m: placement.word.modulus.get(),
            period: length.length.filter(|_| length.is_exact).and_then(|length| u64::try_from(length).ok()),
            clocks: plan.clocks.iter().map(|clock| clock.frequency).collect(),
        })
    }

    /// Returns the offset of a mechanism at an order; zero where it coincides with the carrier.
    pub fn offset_of(&self, mechanism: Mechanism, order: u64) -> Result<Frequency, ExactError> {
        let times = |frequency: Frequency| {
            frequency.hz().times(&Exact::from_integer(i128::from(order))).map(Frequency::from_hz)
        };
        let apart = |a: Frequency, b: Frequency| a.hz().minus(&b.hz()).map(|d| Frequency::from_hz(d.abs()));
        match mechanism {
            Mechanism::Family => Ok(nearest_fraction(self.vco, self.pfd, order)?.tone_offset()),
            Mechanism::RawReference => Ok(nearest_fraction(self.vco, self.reference, order)?.tone_offset()),
            Mechanism::Output => Ok(nearest_fraction(self.output, self.reference, order)?.tone_offset()),
            Mechanism::PfdFrequency => times(self.pfd),
            Mechanism::SubFractional { period } => {
                let spacing = self.pfd.hz().over(&Exact::from_integer(i128::from(period)))?;
                times(Frequency::from_hz(spacing))
            }
            Mechanism::Clock { clock, path } => {
                let multiple = times(self.clocks[clock])?;
                match path {
                    ClockPath::Vco => apart(multiple, self.vco),
                    ClockPath::Output => apart(multiple, self.output),
                    ClockPath::Detector => Ok(nearest_fraction(multiple, self.pfd, 1)?.tone_offset()),
                }
            }
        }
    }

    /// Returns the line that proves a position.
    fn proof(&self, plan: &Plan, mechanism: Mechanism, order: u64) -> Result<String, ExactError> {
        Ok(match mechanism {
            Mechanism::Family => {
                let near = nearest_fraction(self.vco, self.pfd, order)?;
                format!(
                    "{order}·K mod± M = {order}·{} mod± {}; {order}·f_vco − {}·{} = {}",
                    self.k, self.m, near.p, self.pfd, near.signed_offset
                )
            }
            Mechanism::RawReference => {
                let near = nearest_fraction(self.vco, self.reference, order)?;
                format!("{order}·f_vco − {}·{} = {}", near.p, self.reference, near.signed_offset)
            }
            Mechanism::Output => {
                let near = nearest_fraction(self.output, self.reference, order)?;
                format!("{order}·f_output − {}·{} = {}", near.p, self.reference, near.signed_offset)
            }
            Mechanism::PfdFrequency => format!("{order}·{}", self.pfd),
            Mechanism::SubFractional { period } => format!("{order}/{period}·{}", self.pfd),
            Mechanism::Clock { clock, path } => {
                let against = match path {
                    ClockPath::Vco => format!("f_vco {}", self.vco),
                    ClockPath::Output => format!("f_output {}", self.output),
                    ClockPath::Detector => format!("multiples of the PFD frequency {}", self.pfd),
                };
                format!("{order}·{} ({}) against {against}", self.clocks[clock], plan.clocks[clock].name)
            }
        })
    }
}

/// Returns every cause inside the window, unranked.
pub(super) fn causes_near(
    plan: &Plan,
    here: &Situation,
    observed: Frequency,
    within: Frequency,
) -> Result<Vec<Cause>, IdentifyError> {
    let mut searched: Vec<(Mechanism, u64)> = Vec::new();
    if here.k != 0 {
        searched.extend((1..=FAMILY_HARMONICS).map(|h| (Mechanism::Family, h)));
    }
    if here.reference != here.pfd {
        searched.extend((1..=OTHER_HARMONICS).map(|q| (Mechanism::RawReference, q)));
    }
    // Without a divider and with the raw reference at the detector the output family is the one before.
    if here.output != here.vco || here.reference != here.pfd {
        searched.extend((1..=OTHER_HARMONICS).map(|q| (Mechanism::Output, q)));
    }
    for clock in 0..here.clocks.len() {
        for path in [ClockPath::Vco, ClockPath::Output, ClockPath::Detector] {
            searched.extend((1..=CLOCK_HARMONICS).map(|m| (Mechanism::Clock { clock, path }, m)));
        }
    }
    searched.extend((1..=PFD_HARMONICS).map(|h| (Mechanism::PfdFrequency, h)));
    searched.extend(sub_fractional(here, observed, within)?);
    let mut causes: Vec<Cause> = Vec::new();
    for (mechanism, order) in searched {
        let offset = here.offset_of(mechanism, order)?;
        let distance = offset.hz().minus(&observed.hz())?;
        // Higher orders of one mechanism on the same offset are the same tone.
        let known = causes.iter().any(|cause| cause.mechanism == mechanism && cause.offset == offset);
        if offset.hz().sign() > 0 && distance.abs() <= within.hz() && !known {
            let proof = here.proof(plan, mechanism, order)?;
            causes.push(Cause { mechanism, order, offset, distance_hz: distance.to_f64(), proof, shifts: Vec::new() });
        }
    }
    Ok(causes)
}

/// Returns the lines of the period inside the window, where their spacing is wide enough for that to mean something.
fn sub_fractional(
    here: &Situation,
    observed: Frequency,
    within: Frequency,
) -> Result<Vec<(Mechanism, u64)>, ExactError> {
    let Some(period) = here.period.filter(|period| *period > 1 && here.k != 0) else { return Ok(Vec::new()) };
    let spacing = here.pfd.hz().over(&Exact::from_integer(i128::from(period)))?;
    if spacing <= within.hz() {
        return Ok(Vec::new());
    }
    let line = observed.hz().over(&spacing)?.round_half_even();
    let reduced = here.m / num_integer::gcd(here.k, here.m);
    // Lines at multiples of T/M' belong to the family.
    let is_family = line.rem_euclid(i128::from(period / reduced)) == 0;
    Ok(u64::try_from(line)
        .ok()
        .filter(|line| *line > 0 && !is_family)
        .map(|line| (Mechanism::SubFractional { period }, line))
        .into_iter()
        .collect())
}

impl Cause {
    /// Returns the mechanism in words.
    #[must_use]
    pub fn name(&self, plan: &Plan) -> String {
        match self.mechanism {
            Mechanism::Family => format!("{} × K/M (coupling, detector nonlinearity or modulator)", self.order),
            Mechanism::RawReference => format!("VCO near a 1/{} boundary of the raw reference", self.order),
            Mechanism::Output => format!("output near a 1/{} boundary of the reference", self.order),
            Mechanism::Clock { clock, path } => format!("{} × {} {}", plan.clocks[clock].name, self.order, path.word()),
            Mechanism::PfdFrequency => format!("PFD frequency × {} (leakage or offset current)", self.order),
            Mechanism::SubFractional { period } => {
                format!("line {} of the modulator's period of {period} cycles", self.order)
            }
        }
    }
}
