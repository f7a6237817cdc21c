//! The modulators that were weighed, best first: how many channels each leaves bad and marginal.

use super::frame::{Axis, Frame, Hold, Room, plot};
use super::{Plot, paint_of};
use crate::assess::Verdict;
use crate::decide::compare::Comparison;
use crate::report::ReportError;
use crate::report::figures::{decibel, significant};
use crate::report::paint::Paint;

const NAME: &str = "options";
const TITLE: &str = "Channels that each modulator leaves, in the order of the ranking";
/// Places drawn.
const SHOWN: usize = 8;
/// Height of one place in the picture: its name, and the bar under it.
const PLACE: u32 = 38;

/// Returns the plot, or `None` without a comparison.
pub(super) fn options(comparison: Option<&Comparison>) -> Result<Option<Plot>, ReportError> {
    let Some(comparison) = comparison.filter(|found| !found.ranked.is_empty()) else { return Ok(None) };
    let shown = &comparison.ranked[..comparison.ranked.len().min(SHOWN)];
    let height = 66 + 50 + PLACE * u32::try_from(shown.len()).unwrap_or(8);
    let all = comparison.sample.channels as f64;
    let Some(mut x) = Axis::linear(0.0, all, "channels tried", |value| significant(value, 6)) else { return Ok(None) };
    x.ticks.retain(|(tick, _)| tick.fract() == 0.0);
    let Some(mut y) = Axis::linear(0.0, shown.len() as f64, "", |_| String::new()) else { return Ok(None) };
    y.ticks.clear();
    let mut body = String::new();
    // Names stand above their bars, the worst margin on the right of them.
    let room = Room { left: 14.0, right: 100.0, top: 50.0, bottom: 46.0 };
    let mut frame = Frame::new(&mut body, height, room, x, y);
    frame.text(TITLE, (8.0, 6.0), 14.0, Paint::Ink, Hold::Start);
    frame.verdict_words((8.0, 29.5), &[Verdict::Bad, Verdict::Marginal, Verdict::Clear]);
    let (left, _, right, _) = frame.field();
    frame.text("worst margin", (right + 8.0, 29.5), 11.0, Paint::Faint, Hold::Start);
    for (place, entry) in shown.iter().enumerate() {
        let top = (shown.len() - place) as f64 - 0.45;
        let middle = frame.point(0.0, top - 0.2).1 - 6.0;
        let name = format!("{}. {}", entry.place, crate::report::document::shortened(&entry.option.name(), 100));
        frame.text(&name, (left, frame.point(0.0, top).1 - 15.0), 11.0, Paint::Ink, Hold::Start);
        let figures = &entry.figures;
        let mut from = 0.0;
        for (verdict, number) in
            [(Verdict::Bad, figures.bad), (Verdict::Marginal, figures.marginal), (Verdict::Clear, figures.clear)]
        {
            let to = from + number as f64;
            if number > 0 {
                let (start, end) = (frame.point(from, top), frame.point(to, top - 0.4));
                frame.block(start, end, paint_of(verdict));
            }
            from = to;
        }
        let margin = figures.worst_margin_db.map_or_else(|| "unknown".to_owned(), |db| format!("{} dB", decibel(db)));
        frame.text(&margin, (right + 8.0, middle), 11.0, Paint::Ink, Hold::Start);
    }
    frame.finish(NAME)?;
    let sample = &comparison.sample;
    let caption = format!(
        "The first {} places; bad, marginal and clear among {} of {} channels ({}). The table gives the reason of each place.",
        shown.len(),
        sample.channels,
        sample.of,
        sample.rule
    );
    Ok(Some(plot(NAME, TITLE, caption, height, &body)))
}
