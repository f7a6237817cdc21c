//! The run's own check of its tables: sampled channels computed again without them.

use rayon::prelude::*;

use crate::assess::{AssessError, ChannelResult, Setup};
use crate::base::db_from_power;

use super::result::MethodCheck;

/// Channels checked in every run.
const CHECKED_CHANNELS: usize = 12;
/// Largest difference of a level that the tables may make \[dB\].
const LEVEL_ALLOWANCE_DB: f64 = 0.02;
/// Largest difference of the noise that the tables may make \[dB\].
const NOISE_ALLOWANCE_DB: f64 = 0.01;

/// What one channel shows.
#[derive(Debug, Clone, Copy, Default)]
struct Difference {
    level_db: Option<f64>,
    noise_db: Option<f64>,
}

/// Adds the comparison of channels spread over the plan to the run's check, and returns a warning for each that differs
/// by more than the tables may.
///
/// # Errors
/// As for the channels themselves.
pub fn check_tables(
    setup: &Setup,
    channels: &[ChannelResult],
    check: &mut MethodCheck,
) -> Result<Vec<String>, AssessError> {
    let legal: Vec<&ChannelResult> = channels.iter().filter(|channel| channel.legal).collect();
    let count = legal.len().min(CHECKED_CHANNELS);
    let sampled: Vec<&ChannelResult> = (0..count).map(|i| legal[i * legal.len() / count]).collect();
    let direct = setup.direct();
    let again = sampled
        .par_iter()
        .map(|channel| direct.assess(channel.group_index, channel.index, channel.channel, &mut direct.scratch()))
        .collect::<Result<Vec<_>, AssessError>>()?;
    let mut warnings = Vec::new();
    for (channel, exact) in sampled.into_iter().zip(&again) {
        let found = difference(channel, exact);
        check.table_channels += 1;
        check.table_level_difference_db = larger(check.table_level_difference_db, found.level_db);
        check.table_noise_difference_db = larger(check.table_noise_difference_db, found.noise_db);
        let mut doubt = |what: &str, size_db: Option<f64>, allowed_db: f64| {
            if let Some(size_db) = size_db.filter(|size_db| *size_db > allowed_db) {
                warnings.push(format!(
                    "method check: {what} of channel {} differs by {size_db:.3} dB from its direct computation, {allowed_db} dB allowed",
                    channel.channel
                ));
            }
        };
        doubt("a level", found.level_db, LEVEL_ALLOWANCE_DB);
        doubt("the noise", found.noise_db, NOISE_ALLOWANCE_DB);
        if channel.tones.len() != exact.tones.len() {
            warnings.push(format!(
                "method check: channel {} lists {} tones, {} by direct computation",
                channel.channel,
                channel.tones.len(),
                exact.tones.len()
            ));
        }
    }
    Ok(warnings)
}

fn larger(a: Option<f64>, b: Option<f64>) -> Option<f64> {
    a.into_iter().chain(b).reduce(f64::max)
}

/// Returns the largest differences of levels and noise of one channel computed twice.
fn difference(channel: &ChannelResult, exact: &ChannelResult) -> Difference {
    let mut found = Difference::default();
    for tone in &channel.tones {
        let Some(other) = exact.tones.iter().find(|other| other.label == tone.label) else { continue };
        let (a, b) = (&tone.contributions, &other.contributions);
        let pairs = [
            (tone.known_level_dbc, other.known_level_dbc),
            (a.coupling_dbc, b.coupling_dbc),
            (a.nonlinearity_dbc, b.nonlinearity_dbc),
            (a.modulator_dbc, b.modulator_dbc),
        ];
        for (one, two) in pairs {
            found.level_db = larger(found.level_db, one.zip(two).map(|(one, two)| (one - two).abs()));
        }
    }
    let noise = channel.phase_error_known_deg.zip(exact.phase_error_known_deg);
    found.noise_db = noise.filter(|(a, b)| *a > 0.0 && *b > 0.0).map(|(a, b)| db_from_power((a / b).powi(2)).abs());
    found
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::plan::demo_plan;

    /// Checks the demonstration plan with tables made wrong by these factors.
    fn checked(curve_by: f64, noise_by: f64) -> (MethodCheck, Vec<String>) {
        let plan = demo_plan();
        let mut setup = Setup::new(&plan).unwrap().tabulated();
        setup.bend_tables(curve_by, noise_by);
        let mut scratch = setup.scratch();
        let count = plan.groups[0].channels.len();
        let channels: Vec<ChannelResult> =
            (0..count).map(|index| setup.assess_index(0, index, &mut scratch).unwrap()).collect();
        let mut check = MethodCheck::default();
        let warnings = check_tables(&setup, &channels, &mut check).unwrap();
        (check, warnings)
    }

    #[test]
    fn right_tables_pass_far_below_what_is_allowed() {
        let (check, warnings) = checked(1.0, 1.0);
        assert!(warnings.is_empty(), "{warnings:?}");
        assert_eq!(check.table_channels, 12);
        assert!(check.table_level_difference_db.unwrap() < 1e-4, "{check:?}");
        assert!(check.table_noise_difference_db.unwrap() < 1e-4, "{check:?}");
    }

    #[test]
    fn a_wrong_curve_is_reported() {
        // 1 % of a line is 0.086 dB.
        let (check, warnings) = checked(1.01, 1.0);
        assert!(check.table_level_difference_db.unwrap() > 0.05, "{check:?}");
        assert!(warnings.iter().any(|text| text.starts_with("method check: a level of channel")), "{warnings:?}");
    }

    #[test]
    fn wrong_noise_is_reported() {
        // 1 % of the power is 0.043 dB.
        let (check, warnings) = checked(1.0, 1.01);
        assert!(check.table_noise_difference_db.unwrap() > 0.03, "{check:?}");
        assert!(warnings.iter().any(|text| text.starts_with("method check: the noise of channel")), "{warnings:?}");
    }
}
