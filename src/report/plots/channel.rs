//! One channel's noise budget with its tones, and what an offset current does to it.

use super::Plot;
use super::frame::{Axis, Frame, Hold, ROOM, Room, plot};
use crate::assess::{ChannelResult, OffsetSweep};
use crate::base::db_from_power;
use crate::loop_model::NoiseBudget;
use crate::report::ReportError;
use crate::report::figures::significant;
use crate::report::paint::Paint;

const HEIGHT: u32 = 440;
/// Paints of the sources, in turn; each curve also has its name at its end.
const PAINTS: [Paint; 4] = [Paint::Sequence, Paint::Clear, Paint::Marginal, Paint::Edge];

/// Returns the noise budget as a picture, tones as stems; `None` without any known source.
pub(crate) fn budget_svg(channel: &ChannelResult, budget: &NoiseBudget) -> Result<Option<String>, ReportError> {
    Ok(budget_plot(channel, budget)?.map(|plot| plot.file()))
}

/// Returns the noise budget as a plot of a report; `None` without any known source.
pub(super) fn budget_plot(channel: &ChannelResult, budget: &NoiseBudget) -> Result<Option<Plot>, ReportError> {
    const NAME: &str = "budget";
    const TITLE: &str = "Noise of the channel at the output, source by source, and its tones";
    let (Some(first), Some(last)) = (budget.offset_hz.first(), budget.offset_hz.last()) else { return Ok(None) };
    let level = |density: &f64| (*density > 0.0).then(|| db_from_power(*density));
    let known = budget.known();
    let tones: Vec<(f64, f64, bool)> = channel
        .tones
        .iter()
        .filter(|tone| tone.offset_hz >= *first && tone.offset_hz <= *last)
        .filter_map(|tone| Some((tone.offset_hz, tone.known_level_dbc?, tone.level_dbc.is_some())))
        .collect();
    let top = known.iter().filter_map(level).chain(tones.iter().map(|tone| tone.1)).fold(f64::NEG_INFINITY, f64::max);
    let low = known.iter().filter_map(level).fold(f64::INFINITY, f64::min).max(top - 160.0) - 25.0;
    let Some(x) = Axis::log_hz(*first, *last, "offset from the carrier") else { return Ok(None) };
    let unit = "density [dBc/Hz], tones [dBc], single sideband";
    let Some(y) = Axis::linear(low, top + 8.0, unit, |y| significant(y, 6)) else { return Ok(None) };
    let mut body = String::new();
    let mut frame = Frame::new(&mut body, HEIGHT, Room { right: 150.0, ..ROOM }, x, y);
    frame.heading(TITLE);
    let mut labels: Vec<(f64, &str, Paint)> = Vec::new();
    let mut draw = |frame: &mut Frame<'_>, name: &'static str, density: &[f64], paint: Paint, width: f64| {
        let points: Vec<(f64, f64)> = budget
            .offset_hz
            .iter()
            .zip(density)
            .filter_map(|(offset, d)| Some((*offset, level(d).filter(|l| *l >= low)?)))
            .map(|(offset, level)| frame.point(offset, level))
            .collect();
        frame.line(&points, paint, width);
        if let Some(end) = points.last() {
            labels.push((end.1, name, paint));
        }
    };
    for (i, source) in budget.sources.iter().enumerate() {
        draw(&mut frame, source.name, &source.density, PAINTS[i % PAINTS.len()], 1.1);
    }
    let sum = if budget.unknown.is_empty() { "total" } else { "sum of the known" };
    draw(&mut frame, sum, &known, Paint::Ink, 2.0);
    for (offset, height, is_whole) in &tones {
        let (tip, foot) = (frame.point(*offset, height.max(low)), frame.point(*offset, low));
        frame.line(&[tip, foot], if *is_whole { Paint::Modulator } else { Paint::Unknown }, 2.0);
    }
    // Names beside the ends of their curves, pushed apart.
    labels.sort_by(|a, b| a.0.total_cmp(&b.0));
    let (_, _, right, foot) = frame.field();
    let mut places: Vec<f64> = Vec::with_capacity(labels.len());
    for (at, ..) in &labels {
        places.push(places.last().map_or(*at, |last| at.max(last + 13.0)));
    }
    let mut least = foot;
    for place in places.iter_mut().rev() {
        *place = place.min(least);
        least = *place - 13.0;
    }
    for ((_, name, paint), place) in labels.into_iter().zip(places) {
        frame.text(name, (right + 6.0, place - 6.0), 11.0, paint, Hold::Start);
    }
    frame.finish(NAME)?;
    let missing = if budget.unknown.is_empty() {
        String::new()
    } else {
        format!(" Unknown and not drawn: {}.", budget.unknown.join(", "))
    };
    let caption = format!(
        "Channel {}: each source through the loop, their sum, and the tones (brown: level known, grey: known part only).{missing}",
        channel.channel
    );
    Ok(Some(plot(NAME, TITLE, caption, HEIGHT, &body)))
}

/// Returns the sweep of the offset current as a picture; `None` where no level is known.
pub(crate) fn offset_svg(sweep: &OffsetSweep) -> Result<Option<String>, ReportError> {
    const NAME: &str = "offset";
    const TITLE: &str = "Fractional tone and reference tone against the offset current";
    let micro = |a: f64| a * 1e6;
    let curve = |of: fn(&crate::assess::OffsetTried) -> Option<f64>| -> Vec<(f64, f64)> {
        sweep.tried.iter().filter_map(|tried| Some((micro(tried.current_a), of(tried)?))).collect()
    };
    let own = curve(|tried| tried.nonlinearity_dbc);
    let reference = curve(|tried| tried.reference_dbc);
    let levels = || own.iter().chain(&reference).map(|point| point.1);
    let (low, high) = levels().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), y| (l.min(y), h.max(y)));
    let end = sweep.tried.last().map_or(0.0, |tried| micro(tried.current_a));
    let Some(x) = Axis::linear(0.0, end, "offset current [uA]", |x| significant(x, 4)) else { return Ok(None) };
    let Some(y) = Axis::linear(low.max(high - 70.0) - 5.0, high + 5.0, "at the output [dBc]", |y| significant(y, 6))
    else {
        return Ok(None);
    };
    let (bottom, top) = (y.low, y.high);
    let mut body = String::new();
    let mut frame = Frame::new(&mut body, HEIGHT, Room { right: 150.0, ..ROOM }, x, y);
    frame.heading(TITLE);
    for (points, paint, name) in
        [(own, Paint::Modulator, "nonlinearity, h = 1"), (reference, Paint::Edge, "reference tone, h = 1")]
    {
        let places: Vec<(f64, f64)> =
            points.iter().filter(|p| p.1 >= bottom).map(|(x, y)| frame.point(*x, *y)).collect();
        frame.line(&places, paint, 1.8);
        if let Some(end) = places.last() {
            frame.text(name, (end.0 + 6.0, end.1 - 6.0), 11.0, paint, Hold::Start);
        }
    }
    let clear = micro(sweep.clearing_a);
    let (up, down) = (frame.point(clear, top), frame.point(clear, bottom));
    frame.line(&[up, down], Paint::Guard, 1.2);
    let label = format!("kink cleared: {} uA", significant(clear, 4));
    frame.text(&label, (up.0 + 5.0, up.1 + 4.0), 11.0, Paint::Faint, Hold::Start);
    frame.finish(NAME)?;
    let caption = "Where a curve ends, no level worth the name is left.";
    Ok(Some(plot(NAME, TITLE, caption.to_owned(), HEIGHT, &body).file()))
}
