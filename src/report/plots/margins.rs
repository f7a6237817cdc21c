//! How much room the channels have below their limits.

use super::frame::{Axis, Frame, Hold, ROOM, Room, plot, round_step};
use super::{Plot, paint_of};
use crate::assess::Verdict;
use crate::report::ReportError;
use crate::report::figures::count;
use crate::report::paint::Paint;
use crate::survey::SurveyResult;

const NAME: &str = "margins";
const TITLE: &str = "Margin of the worst tone";
const HEIGHT: u32 = 280;
const STACK: [Verdict; 3] = [Verdict::Bad, Verdict::Marginal, Verdict::Clear];

/// Returns the plot, or `None` where no channel has a margin.
pub(super) fn margins(result: &SurveyResult) -> Result<Option<Plot>, ReportError> {
    let margins: Vec<(f64, Verdict)> = result
        .channels
        .iter()
        .filter_map(|channel| Some((channel.worst_tone()?.margin_db?, channel.verdict)))
        .filter(|(margin, _)| margin.is_finite())
        .collect();
    if margins.is_empty() {
        return Ok(None);
    }
    let wanted = limit_margin_db(result);
    let ends = margins.iter().map(|(margin, _)| *margin).chain([0.0, wanted.unwrap_or(0.0)]);
    let (low, high) = ends.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), y| (low.min(y), high.max(y)));
    let width = round_step(((high - low) / 40.0).max(0.5));
    let low = (low / width).floor() * width;
    // One bin more than the highest margin reaches: a margin on an edge belongs to the bin above it.
    let bins: Vec<f64> = (0..200u32).map(|bin| low + width * f64::from(bin)).take_while(|edge| *edge <= high).collect();
    let high = low + width * bins.len() as f64;
    let stacks: Vec<[u64; 3]> = bins.iter().map(|edge| stack(&margins, *edge, width)).collect();
    let tallest = stacks.iter().map(|stack| stack.iter().sum::<u64>()).max().unwrap_or(0);
    let x = Axis::linear(low, high, "margin below the limit [dB]; negative is above the limit", show);
    let y = Axis::linear(0.0, tallest as f64 * 1.05, "channels", |value| format!("{value:.0}"));
    let (Some(x), Some(mut y)) = (x, y) else { return Ok(None) };
    y.ticks.retain(|(tick, _)| tick.fract() == 0.0);
    let mut body = String::new();
    let mut frame = Frame::new(&mut body, HEIGHT, Room { right: 22.0, top: 66.0, ..ROOM }, x, y);
    frame.heading(TITLE);
    let summary = &result.summary;
    frame.verdict_key([
        (Verdict::Clear, summary.clear),
        (Verdict::Marginal, summary.marginal),
        (Verdict::Bad, summary.bad),
    ]);
    bars(&mut frame, &bins, width, &stacks);
    rulers(&mut frame, wanted);
    frame.finish(NAME)?;
    let without = result.channels.len() - margins.len();
    let caption = format!(
        "Channels by the margin of their worst tone, limit minus level; where the level is unknown, of its known part. \
         Bins of {} dB. Channels without a margin, not drawn: {}.",
        show(width),
        count(without as u64)
    );
    Ok(Some(plot(NAME, TITLE, caption, HEIGHT, &body)))
}

fn show(value: f64) -> String {
    crate::report::figures::significant(value, 6)
}

/// Returns the margin that "marginal" begins at, where all groups share it.
fn limit_margin_db(result: &SurveyResult) -> Option<f64> {
    let mut margins = result.plan.groups.iter().map(|group| group.limits.margin_db);
    let first = margins.next()?;
    margins.all(|margin| margin == first).then_some(first)
}

fn stack(margins: &[(f64, Verdict)], edge: f64, width: f64) -> [u64; 3] {
    STACK.map(|verdict| {
        let inside = |(margin, of): &&(f64, Verdict)| *of == verdict && *margin >= edge && *margin < edge + width;
        margins.iter().filter(inside).count() as u64
    })
}

fn bars(frame: &mut Frame<'_>, bins: &[f64], width: f64, stacks: &[[u64; 3]]) {
    for (layer, verdict) in STACK.into_iter().enumerate() {
        for (edge, stack) in bins.iter().zip(stacks) {
            let below: u64 = stack[..layer].iter().sum();
            if stack[layer] == 0 {
                continue;
            }
            let (left, bottom) = frame.point(*edge, below as f64);
            let (right, top) = frame.point(edge + width, (below + stack[layer]) as f64);
            frame.block((left + 0.5, top), (right - 0.5, bottom), paint_of(verdict));
        }
    }
}

fn rulers(frame: &mut Frame<'_>, wanted: Option<f64>) {
    let (_, top, _, bottom) = frame.field();
    let limit = frame.point(0.0, 0.0).0;
    frame.line(&[(limit, top - 4.0), (limit, bottom)], Paint::Ink, 1.2);
    frame.text("limit", (limit - 4.0, top - 12.0), 10.5, Paint::Ink, Hold::End);
    if let Some(margin) = wanted.filter(|margin| *margin > 0.0) {
        let x = frame.point(margin, 0.0).0;
        frame.line(&[(x, top - 4.0), (x, bottom)], Paint::Guard, 1.0);
        frame.text(&format!("margin {}", show(margin)), (x + 4.0, top - 12.0), 10.5, Paint::Ink, Hold::Start);
    }
}
