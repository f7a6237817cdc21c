//! The one modulator spectrum that a report shows.

use crate::assess::{AssessError, ChannelResult, Setup, SpectrumView, spectrum_view};

/// Returns the spectrum of the worst legal channel with a running modulator: the highest verdict, then the smallest
/// margin, ties to the first.
///
/// # Errors
/// As for the channel itself.
pub fn spectrum_of(setup: &Setup, channels: &[ChannelResult]) -> Result<Option<SpectrumView>, AssessError> {
    let margin =
        |channel: &ChannelResult| channel.worst_tone().and_then(|tone| tone.margin_db).unwrap_or(f64::INFINITY);
    let worst = channels
        .iter()
        .enumerate()
        .filter(|(_, channel)| channel.legal && channel.k.is_some_and(|k| k > 0))
        .min_by(|(i, a), (j, b)| b.verdict.cmp(&a.verdict).then(margin(a).total_cmp(&margin(b))).then(i.cmp(j)));
    let Some((position, channel)) = worst else { return Ok(None) };
    let view = spectrum_view(setup, channel.group_index, channel.channel, &mut setup.scratch())?;
    Ok(view.map(|view| SpectrumView { channel: position, ..view }))
}
