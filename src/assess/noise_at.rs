//! The channel's own phase noise at chosen offsets.

use crate::base::db_from_power;

use super::channel::Legal;
use super::noise::channel_budget;
use super::placement::place;
use super::result::ChannelResult;
use super::setup::{AssessError, Setup};

impl Setup<'_> {
    /// Returns the total phase noise of a channel at offsets \[Hz\], at the output \[dBc/Hz\]; `None` where a source is
    /// unknown, and at half the PFD frequency or beyond, where the budget does not reach. Lines of a short period are
    /// tones and not part of it.
    ///
    /// # Errors
    /// As for the channel itself.
    pub fn noise_dbc_per_hz_at(
        &self,
        channel: &ChannelResult,
        offset_hz: &[f64],
    ) -> Result<Vec<Option<f64>>, AssessError> {
        let missing = AssessError::NoSuchChannel { group: channel.group_index, index: channel.index };
        let group = self.plan().groups.get(channel.group_index).ok_or(missing)?;
        let placement = place(self.plan(), group, channel.channel)?;
        let response = self
            .response(&placement)
            .map_err(|source| AssessError::Loop { place: format!("channel {}", channel.channel), source })?;
        let legal = Legal { setup: self, group, channel: channel.channel, placement: &placement };
        let lines = legal.lines(channel.pfd_hz, &mut self.scratch())?.map(|(_, lines)| lines);
        let budget = channel_budget(self, &placement, &response, lines.as_ref(), offset_hz.to_vec());
        let Some(total) = budget.total() else { return Ok(vec![None; offset_hz.len()]) };
        let reaches = |offset: f64| offset < channel.pfd_hz / 2.0;
        Ok(offset_hz
            .iter()
            .zip(total)
            .map(|(offset, density)| (reaches(*offset) && density > 0.0).then(|| db_from_power(density)))
            .collect())
    }
}
