//! What an instrument should show at a tone, and how it must be set.

use serde::Serialize;

use crate::assess::ChannelResult;
use crate::base::{db_from_power, power_from_db};

/// Share of the distance to the next tone that the resolution bandwidth may take.
const BANDWIDTH_SHARE: f64 = 0.1;
/// Widest resolution bandwidth that is proposed \[Hz\].
const WIDEST_HZ: f64 = 1e4;
/// Narrowest resolution bandwidth that is proposed for the sake of noise; a close tone may ask for a narrower one
/// \[Hz\].
const NARROWEST_HZ: f64 = 1.0;
/// How far below the tone the instrument's floor must lie for an error below half a decibel \[dB\].
const FLOOR_BELOW_DB: f64 = 10.0;
/// Span in tone offsets: both sidebands with room beside them.
const SPAN_OFFSETS: f64 = 4.0;

/// One line to measure.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Line {
    /// What is expected there.
    pub label: String,
    /// Tone offset \[Hz\].
    pub offset_hz: f64,
    /// Expected level \[dBc\]; `None` where it is unknown or the tone lies below the plan's tone floor.
    pub expected_dbc: Option<f64>,
    /// Known part of an unknown level \[dBc\].
    pub known_part_dbc: Option<f64>,
    /// Why the level is not given; empty where it is.
    pub unknown: String,
    /// Limit at the offset \[dBc\]; `None` without a mask.
    pub limit_dbc: Option<f64>,
    /// Distance to the carrier or to the next listed tone, whichever is smaller \[Hz\].
    pub distance_hz: f64,
    /// Resolution bandwidth, at most a tenth of the distance \[Hz\].
    pub rbw_hz: f64,
    /// The channel's own phase noise in that bandwidth \[dBc\]; `None` where a source of noise is unknown.
    pub own_noise_dbc: Option<f64>,
    /// The channel's own noise in that bandwidth is less than 10 dB below the expected level: the reading is of noise
    /// too; `None` where either is unknown.
    pub in_own_noise: Option<bool>,
    /// Span around the carrier \[Hz\].
    pub span_hz: f64,
    /// Floor that the instrument needs, 10 dB below the smaller of expected level and limit \[dBc/Hz\]; `None` where
    /// neither is known.
    pub floor_dbc_per_hz: Option<f64>,
}

/// Returns the line at an offset of a channel; `noise_dbc_per_hz` is the channel's own phase noise there.
#[must_use]
pub fn line_at(channel: &ChannelResult, offset_hz: f64, label: &str, noise_dbc_per_hz: Option<f64>) -> Line {
    let same = |other: f64| (other - offset_hz).abs() <= 1e-9 * offset_hz.max(1.0);
    let tone = channel.tones.iter().find(|tone| same(tone.offset_hz));
    let gap_hz = channel
        .tones
        .iter()
        .filter(|other| !same(other.offset_hz))
        .map(|other| (other.offset_hz - offset_hz).abs())
        .fold(offset_hz, f64::min);
    let expected_dbc = tone.and_then(|tone| tone.level_dbc);
    let limit_dbc = tone.and_then(|tone| tone.limit_dbc);
    let weakest = [expected_dbc, limit_dbc].into_iter().flatten().reduce(f64::min);
    let rbw_hz = resolution_hz(gap_hz, weakest.zip(noise_dbc_per_hz));
    let own_noise_dbc = noise_dbc_per_hz.map(|density| density + db_from_power(rbw_hz));
    let unknown = match tone {
        None => "below the plan's tone floor or beyond its span".to_owned(),
        Some(tone) if tone.level_dbc.is_none() => tone.unknown.join(", "),
        Some(_) => String::new(),
    };
    Line {
        label: tone.map_or_else(|| label.to_owned(), |tone| tone.label.clone()),
        offset_hz,
        expected_dbc,
        known_part_dbc: tone.and_then(|tone| if tone.level_dbc.is_none() { tone.known_level_dbc } else { None }),
        unknown,
        limit_dbc,
        distance_hz: gap_hz,
        rbw_hz,
        own_noise_dbc,
        in_own_noise: own_noise_dbc.zip(expected_dbc).map(|(noise, level)| noise > level - FLOOR_BELOW_DB),
        span_hz: step_up(SPAN_OFFSETS * offset_hz),
        floor_dbc_per_hz: weakest.map(|level| level - FLOOR_BELOW_DB - db_from_power(rbw_hz)),
    }
}

/// Returns the resolution bandwidth for a distance, narrowed so that the channel's own noise \[dBc/Hz\] stays 10 dB below
/// the weakest level of interest \[dBc\], but not below `NARROWEST_HZ` for that.
fn resolution_hz(distance_hz: f64, weakest_and_noise: Option<(f64, f64)>) -> f64 {
    let by_distance = step_down((distance_hz * BANDWIDTH_SHARE).min(WIDEST_HZ));
    match weakest_and_noise {
        Some((weakest, noise)) => {
            let by_noise = step_down(power_from_db(weakest - FLOOR_BELOW_DB - noise)).max(NARROWEST_HZ);
            by_distance.min(by_noise)
        }
        None => by_distance,
    }
}

/// Returns the largest of 1, 3, 10, 30 … (and 0.3, 0.1 …) at or below a value.
fn step_down(value: f64) -> f64 {
    let decade = 10f64.powf(value.log10().floor());
    // The logarithm of a round figure may fall a hair short.
    [10.0, 3.0, 1.0].into_iter().map(|step| step * decade).find(|step| *step <= value).unwrap_or(decade * 0.3)
}

/// Returns the smallest of 1, 2, 5, 10 … at or above a value.
fn step_up(value: f64) -> f64 {
    let decade = 10f64.powf(value.log10().floor());
    [1.0, 2.0, 5.0, 10.0].into_iter().map(|step| step * decade).find(|step| *step >= value).unwrap_or(decade * 20.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn steps_are_round_and_on_the_right_side() {
        for (value, down, up) in [
            (5000.0, 3000.0, 5000.0),
            (1000.0, 1000.0, 1000.0),
            (2999.0, 1000.0, 5000.0),
            (0.5, 0.3, 0.5),
            (9.9, 3.0, 10.0),
        ] {
            assert!((step_down(value) - down).abs() < 1e-9 * down, "{value}: {}", step_down(value));
            assert!((step_up(value) - up).abs() < 1e-9 * up, "{value}: {}", step_up(value));
        }
        let mut cases = 0;
        for i in 1..5000u32 {
            let value = f64::from(i) * 0.37;
            assert!(step_down(value) <= value && step_down(value) > value * 0.29, "{value}");
            assert!(step_up(value) >= value && step_up(value) < value * 2.6, "{value}");
            cases += 1;
        }
        assert_eq!(cases, 4999);
    }
}
