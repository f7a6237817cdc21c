//! Tones of other clocks on the board: positions by path, once per exact offset.

use std::ops::RangeInclusive;

use crate::base::{Exact, ExactError, Frequency};

use super::boundary::nearest_fraction;

/// Highest clock harmonic that is looked at.
const MOST_HARMONICS: u64 = 20;

/// Where a clock harmonic meets the signal.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum ClockPath {
    /// Beats with the VCO: |m·f_clk − f_vco|.
    Vco,
    /// Beats at the output: |m·f_clk − f_output|.
    Output,
    /// Sampled by the phase detector: |m·f_clk mod± f_pfd|.
    Detector,
}

impl ClockPath {
    /// Returns the path in words.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Vco => "at the VCO",
            Self::Output => "at the output",
            Self::Detector => "through the detector",
        }
    }
}

/// A clock harmonic within the span.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct ClockTone {
    /// Path.
    pub path: ClockPath,
    /// Clock harmonic m.
    pub harmonic: u64,
    /// Offset, positive.
    pub offset: Frequency,
}

/// The frequencies a clock can meet.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Carriers {
    /// VCO frequency.
    pub vco: Frequency,
    /// Output frequency.
    pub output: Frequency,
    /// PFD frequency.
    pub pfd: Frequency,
}

/// Returns the tones of a clock within `span`, the smallest m for each path and offset, in order of path and m.
///
/// # Errors
/// `ExactError` beyond 127 bits.
pub fn clock_tones(clock: Frequency, carriers: &Carriers, span: Frequency) -> Result<Vec<ClockTone>, ExactError> {
    let mut tones: Vec<ClockTone> = Vec::new();
    for path in [ClockPath::Vco, ClockPath::Output, ClockPath::Detector] {
        // Without an output divider the output is the VCO: one path, not two.
        if path == ClockPath::Output && carriers.output == carriers.vco {
            continue;
        }
        for harmonic in harmonics_in_span(clock, carriers, path, span)? {
            let multiple = clock.hz().times(&Exact::from_integer(i128::from(harmonic)))?;
            let offset = match path {
                ClockPath::Vco => Frequency::from_hz(multiple.minus(&carriers.vco.hz())?.abs()),
                ClockPath::Output => Frequency::from_hz(multiple.minus(&carriers.output.hz())?.abs()),
                ClockPath::Detector => nearest_fraction(Frequency::from_hz(multiple), carriers.pfd, 1)?.tone_offset(),
            };
            let known = tones.iter().any(|tone| tone.path == path && tone.offset == offset);
            if offset.hz().sign() > 0 && offset <= span && !known {
                tones.push(ClockTone { path, harmonic, offset });
            }
        }
    }
    Ok(tones)
}

/// Returns the harmonics that can lie within the span: of a beat with one carrier only those next to it.
fn harmonics_in_span(
    clock: Frequency,
    carriers: &Carriers,
    path: ClockPath,
    span: Frequency,
) -> Result<RangeInclusive<u64>, ExactError> {
    let carrier = match path {
        ClockPath::Vco => carriers.vco,
        ClockPath::Output => carriers.output,
        ClockPath::Detector => return Ok(1..=MOST_HARMONICS),
    };
    if clock.hz().sign() <= 0 {
        return Ok(1..=MOST_HARMONICS);
    }
    // One more than the floor of the lower end may be the first; the floor itself costs nothing.
    let first = carrier.hz().minus(&span.hz())?.over(&clock.hz())?.floor();
    let last = carrier.hz().plus(&span.hz())?.over(&clock.hz())?.floor();
    let bounded = |harmonic: i128| u64::try_from(harmonic.clamp(0, 1 + i128::from(MOST_HARMONICS))).unwrap_or(0);
    Ok(bounded(first).max(1)..=bounded(last).min(MOST_HARMONICS))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn finds_each_path_once() {
        let mhz = |value: i128| Frequency::from_whole_hz(value * 1_000_000);
        let carriers = Carriers { vco: mhz(1922), output: mhz(481), pfd: mhz(20) };
        let tones = clock_tones(mhz(48), &carriers, mhz(10)).unwrap();
        let found: Vec<_> = tones.iter().map(|t| (t.path, t.harmonic, t.offset)).collect();
        // m·48 mod± 20: 8, 4, 4, 8, 0, … : two offsets; 10·48 = 480 is 1 MHz from the output.
        assert_eq!(
            found,
            [(ClockPath::Output, 10, mhz(1)), (ClockPath::Detector, 1, mhz(8)), (ClockPath::Detector, 2, mhz(4)),]
        );
    }

    #[test]
    fn no_harmonic_within_the_span_is_passed_over() {
        let khz = |value: i128| Frequency::from_whole_hz(value * 1_000);
        let mut found = 0;
        for step in 0..400i128 {
            let carriers =
                Carriers { vco: khz(160_000 + 1_237 * step), output: khz(40_000 + 311 * step), pfd: khz(19_200) };
            let (clock, span) = (khz(9_600 + 250 * (step % 9)), khz(400 + 100 * (step % 7)));
            let tones = clock_tones(clock, &carriers, span).unwrap();
            for (path, carrier) in [(ClockPath::Vco, carriers.vco), (ClockPath::Output, carriers.output)] {
                let near: Vec<u64> = (1..=20u64)
                    .filter(|m| {
                        let multiple = clock.hz().times(&Exact::from_integer(i128::from(*m))).unwrap();
                        let offset = multiple.minus(&carrier.hz()).unwrap().abs();
                        offset.sign() > 0 && Frequency::from_hz(offset) <= span
                    })
                    .collect();
                let listed: Vec<u64> = tones.iter().filter(|t| t.path == path).map(|t| t.harmonic).collect();
                assert_eq!(listed, near, "step {step}");
                found += near.len();
            }
        }
        assert!(found > 50, "{found}");
    }
}
