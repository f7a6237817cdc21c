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

/// Several anchors of one path and boundary denominator as one.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FittedAnchor {
    /// The anchor that stands for all, where the first was taken.
    pub level: AnchorLevel,
    /// How many it stands for.
    pub count: usize,
    /// Largest distance of one of them from the fit \[dB\].
    pub spread_db: f64,
}

/// Returns the anchors with those of one path and q fitted to one: its level is the least-squares one in decibels, each
/// carried to the place of the first by the loop's transfer; its roll-off the mean. One coupling has one level: two
/// measurements of it must not add.
#[must_use]
pub fn fitted_anchors(anchors: &[AnchorLevel]) -> Vec<FittedAnchor> {
    let mut fitted: Vec<FittedAnchor> = Vec::new();
    for (i, first) in anchors.iter().enumerate() {
        let is_same = |other: &AnchorLevel| other.mechanism == first.mechanism && other.q == first.q;
        if anchors[..i].iter().any(is_same) {
            continue;
        }
        let same: Vec<&AnchorLevel> = anchors[i..].iter().filter(|other| is_same(other)).collect();
        // What the first alone predicts where each was taken, against what was seen there.
        let residuals: Vec<f64> =
            same.iter().filter_map(|other| Some(other.level_dbc - first.level_dbc_at(1, &other.taken_at)?)).collect();
        let count = residuals.len().max(1) as f64;
        let shift_db = residuals.iter().sum::<f64>() / count;
        let spread_db = residuals.iter().map(|r| (r - shift_db).abs()).fold(0.0, f64::max);
        let level = AnchorLevel {
            level_dbc: first.level_dbc + shift_db,
            roll_off_db: same.iter().map(|other| other.roll_off_db).sum::<f64>() / same.len() as f64,
            basis: same.iter().map(|other| other.basis).max().unwrap_or(first.basis),
            ..*first
        };
        fitted.push(FittedAnchor { level, count: same.len(), spread_db });
    }
    fitted
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn anchors_of_one_coupling_are_fitted_and_do_not_add() {
        let at =
            |offset_hz: f64, closed_loop: f64| Transfer { offset_hz, closed_loop, error: 0.1, output_divider: 1.0 };
        let anchor = |level_dbc: f64, q: u64, taken_at: Transfer| AnchorLevel {
            mechanism: Mechanism::Detector,
            level_dbc,
            q,
            roll_off_db: 2.0,
            basis: Basis::Measured,
            taken_at,
        };
        // Half the transfer explains 6.02 dB; what is left differs by 2 dB: the mean is 1 dB above the first.
        let fitted = fitted_anchors(&[
            anchor(-50.0, 1, at(1e4, 1.0)),
            anchor(-70.0, 2, at(1e4, 1.0)),
            anchor(-50.0 - 6.0206 + 2.0, 1, at(1e5, 0.5)),
        ]);
        assert_eq!(fitted.iter().map(|f| f.count).collect::<Vec<_>>(), [2, 1]);
        assert!((fitted[0].level.level_dbc + 49.0).abs() < 1e-4);
        assert!((fitted[0].spread_db - 1.0).abs() < 1e-4);
        assert_eq!((fitted[1].level.level_dbc, fitted[1].spread_db), (-70.0, 0.0));
    }

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
