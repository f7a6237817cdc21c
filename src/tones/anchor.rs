//! Coupling levels: carried from where they were measured to where they are asked for.

use serde::Serialize;

use crate::base::{Basis, db_from_power};

/// Path of a coupled tone to the output.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Mechanism {
    /// Through the phase detector: follows |H|.
    Detector,
    /// Through the tuning node: follows |E|/f.
    Tuning,
    /// After the loop: follows neither, and no output divider.
    Output,
}

/// What a loop does to a tone at one offset: `|H|` and `|E|`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Transfer {
    /// Offset of the tone \[Hz\], positive.
    pub offset_hz: f64,
    /// Size of the closed-loop gain H.
    pub closed_loop: f64,
    /// Size of the error response E.
    pub error: f64,
    /// Output divider P.
    pub output_divider: f64,
}

impl Transfer {
    /// Returns the amplitude a path gives to a tone, up to a constant; `None` where it vanishes or is not finite.
    #[must_use]
    pub fn along(&self, mechanism: Mechanism) -> Option<f64> {
        let amplitude = match mechanism {
            Mechanism::Detector => self.closed_loop / self.output_divider,
            Mechanism::Tuning => self.error / self.offset_hz / self.output_divider,
            Mechanism::Output => 1.0,
        };
        (amplitude.is_finite() && amplitude > 0.0).then_some(amplitude)
    }
}

/// An anchor together with the loop's transfer where it was taken.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct AnchorLevel {
    /// Path.
    pub mechanism: Mechanism,
    /// Level where it was taken, at the output \[dBc\], single sideband.
    pub level_dbc: f64,
    /// Boundary denominator.
    pub q: u64,
    /// Fall per harmonic \[dB\].
    pub roll_off_db: f64,
    /// Origin of the level.
    pub basis: Basis,
    /// The loop where it was taken.
    pub taken_at: Transfer,
}

impl AnchorLevel {
    /// Returns the level of harmonic `order` \[dBc\] at the output, where the loop's transfer is `here`:
    /// `anchor − roll_off·(h − 1) + 20·log10(T(h·d)/T(d_a)) − 20·log10(P/P_a)`; `None` where a transfer vanishes.
    ///
    /// # Examples
    /// Twice the output divider costs 6.02 dB (phase-modulation identity):
    /// ```
    /// use thornmap::base::Basis;
    /// use thornmap::tones::{AnchorLevel, Mechanism, Transfer};
    /// let taken_at = Transfer { offset_hz: 1e4, closed_loop: 1.0, error: 0.1, output_divider: 1.0 };
    /// let anchor = AnchorLevel { mechanism: Mechanism::Detector, level_dbc: -50.0, q: 1, roll_off_db: 0.0,
    ///     basis: Basis::Measured, taken_at };
    /// let level = anchor.level_dbc_at(1, &Transfer { output_divider: 2.0, ..taken_at }).unwrap();
    /// assert!((level + 56.0206).abs() < 1e-4);
    /// ```
    #[must_use]
    pub fn level_dbc_at(&self, order: u64, here: &Transfer) -> Option<f64> {
        let ratio = here.along(self.mechanism)? / self.taken_at.along(self.mechanism)?;
        #[allow(clippy::cast_precision_loss, reason = "harmonic orders are small")]
        let fall_db = self.roll_off_db * (order.saturating_sub(1)) as f64;
        Some(self.level_dbc - fall_db + db_from_power(ratio * ratio))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn each_path_follows_its_own_transfer() {
        let taken_at = Transfer { offset_hz: 1e4, closed_loop: 1.0, error: 0.1, output_divider: 4.0 };
        let here = Transfer { offset_hz: 1e5, closed_loop: 0.5, error: 1.0, output_divider: 4.0 };
        let level = |mechanism| {
            AnchorLevel { mechanism, level_dbc: -50.0, q: 1, roll_off_db: 3.0, basis: Basis::Measured, taken_at }
                .level_dbc_at(3, &here)
                .unwrap()
        };
        assert!((level(Mechanism::Detector) - (-50.0 - 6.0 - 6.0206)).abs() < 1e-3);
        assert!((level(Mechanism::Tuning) - (-50.0 - 6.0)).abs() < 1e-9);
        assert!((level(Mechanism::Output) - (-50.0 - 6.0)).abs() < 1e-9);
    }
}
