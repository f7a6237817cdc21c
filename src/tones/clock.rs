//! Tones of other clocks on the board: positions by path, once per exact offset.

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
        for harmonic in 1..=MOST_HARMONICS {
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
}
