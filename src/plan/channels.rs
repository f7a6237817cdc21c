//! Channel groups.

use crate::base::{Exact, Frequency};

use super::checked::{ChannelGroup, ChannelList, Limits};
use super::reader::{Located, Reader, Section};
use super::spurs::limits;
use super::tables::{Load, read_channels};

/// Channels that one plan may hold.
pub const MOST_CHANNELS: u64 = 10_000_000;
/// Channels that a plan may hold where none is enumerated.
pub const MOST_DENSE_CHANNELS: u64 = 1 << 53;

/// Reads one `[[channels]]`; `number` counts from 1.
pub fn group(
    reader: &mut Reader,
    section: &Section,
    number: usize,
    plan: (&Limits, &[u64]),
    load: Load,
) -> Option<ChannelGroup> {
    let name = reader.text(section, "name").map_or_else(|| format!("group {number}"), |found| found.value);
    let channels = channel_list(reader, section, load);
    let injection = reader.frequency(section, "injection").map_or(Frequency::from_whole_hz(0), |found| found.value);
    let output_dividers = reader.wholes(section, "output").map_or_else(|| plan.1.to_vec(), |found| found.value);
    let own = match reader.table(section, "limits", "limits") {
        Some(table) => limits(reader, &table, None, Some(plan.0)),
        None => {
            if section.value("limits").is_none() {
                reader.default(section.key("limits"), "the plan's limits");
            }
            plan.0.clone()
        }
    };
    let channels = channels?;
    check_outputs(reader, section, &channels, injection);
    Some(ChannelGroup { name, channels, injection, output_dividers, limits: own })
}

/// Exactly one of a raster, a list and a file.
fn channel_list(reader: &mut Reader, section: &Section, load: Load) -> Option<ChannelList> {
    let is_raster = ["first", "last", "spacing"].iter().any(|name| section.value(name).is_some());
    let ways = [
        ("first, last and spacing", is_raster),
        ("list", section.value("list").is_some()),
        ("file", section.value("file").is_some()),
    ];
    let given: Vec<&str> = ways.iter().filter(|(_, given)| *given).map(|(name, _)| *name).collect();
    match given.as_slice() {
        ["first, last and spacing"] => raster(reader, section),
        ["list"] => {
            let found = reader.quantities(section, "list")?;
            let list = Located {
                value: found.value.into_iter().map(Frequency::from_hz).collect::<Vec<_>>(),
                span: found.span,
            };
            listed(reader, section, "list", list)
        }
        ["file"] => {
            let file = reader.text(section, "file")?;
            let list = read_channels(reader, &section.key("file"), &file, load)?;
            listed(reader, section, "file", Located { value: list, span: file.span })
        }
        [] => {
            let text = "no channels; give first, last and spacing, or list, or file";
            reader.problem(&section.path, &section.head(), text);
            None
        }
        several => {
            let text =
                format!("found {}; give exactly one of first with last and spacing, list, file", several.join(" and "));
            reader.problem(&section.path, &section.head(), text);
            None
        }
    }
}

fn listed(reader: &mut Reader, section: &Section, name: &str, list: Located<Vec<Frequency>>) -> Option<ChannelList> {
    if list.value.is_empty() {
        reader.problem(&section.key(name), &list.span, "found no channel, at least one is due");
        return None;
    }
    let mut sorted = list.value.clone();
    sorted.sort();
    if let Some(pair) = sorted.windows(2).find(|pair| pair[0] == pair[1]) {
        reader.problem(&section.key(name), &list.span, format!("holds {} twice", pair[0]));
        return None;
    }
    Some(ChannelList::List(list.value))
}

fn raster(reader: &mut Reader, section: &Section) -> Option<ChannelList> {
    let first = reader.frequency(section, "first");
    let last = reader.frequency(section, "last");
    let spacing = reader.frequency(section, "spacing");
    for name in ["first", "last", "spacing"] {
        if section.value(name).is_none() {
            reader.problem(&section.key(name), &section.head(), "missing; a raster needs first, last and spacing");
        }
    }
    let (first, last, spacing) = (first?, last?, spacing?);
    if last.value < first.value {
        let text = format!("found {}, below first, {}", last.value, first.value);
        let hint = Some("exchange first and last".to_owned());
        reader.problem_with_hint(&section.key("last"), &last.span, text, hint);
        return None;
    }
    let sign = spacing.value.hz().sign();
    if sign < 0 || (sign == 0 && first.value != last.value) {
        reader.problem(&section.key("spacing"), &spacing.span, format!("found {}, must be above zero", spacing.value));
        return None;
    }
    if sign == 0 {
        return Some(ChannelList::Raster { first: first.value, spacing: spacing.value, count: 1 });
    }
    let steps = last.value.hz().minus(&first.value.hz()).and_then(|width| width.over(&spacing.value.hz()));
    let Ok(steps) = steps else {
        reader.problem(&section.key("spacing"), &spacing.span, "the raster needs more than 127 bits to be exact");
        return None;
    };
    let Some(count) = u64::try_from(steps.floor()).ok().and_then(|steps| steps.checked_add(1)) else {
        reader.problem(&section.key("spacing"), &spacing.span, "the raster has too many channels");
        return None;
    };
    if count > reader.most_channels {
        let text = format!("the raster has {count} channels, at most {} are allowed", reader.most_channels);
        let hint = (count <= MOST_DENSE_CHANNELS).then(|| "remedy --intervals takes it".to_owned());
        reader.problem_with_hint(&section.key("spacing"), &spacing.span, text, hint);
        return None;
    }
    if !steps.is_integer() {
        let list = ChannelList::Raster { first: first.value, spacing: spacing.value, count };
        let end = list.get(count - 1).map_or_else(String::new, |channel| channel.to_string());
        reader.warnings.push(format!(
            "{}: {} is not on the raster; the last channel is {end}",
            section.key("last"),
            last.value
        ));
    }
    Some(ChannelList::Raster { first: first.value, spacing: spacing.value, count })
}

/// Every output frequency must be above zero: on a raster the lowest decides, in a list the smallest.
fn check_outputs(reader: &mut Reader, section: &Section, channels: &ChannelList, injection: Frequency) {
    let lowest = match channels {
        ChannelList::Raster { first, .. } => Some(*first),
        ChannelList::List(list) => list.iter().min().copied(),
    };
    let output = lowest.and_then(|channel| channel.hz().plus(&injection.hz()).ok());
    if output.is_none_or(|hz| hz <= Exact::ZERO) {
        let span = section.value("injection").map_or_else(|| section.head(), toml::Spanned::span);
        let lowest = lowest.map_or_else(String::new, |channel| channel.to_string());
        let text = format!("the output of channel {lowest} with injection {injection} is not above zero");
        reader.problem(&section.key("injection"), &span, text);
    }
}
