//! The modulator's noise on one channel: computed, by the formula, and after the loop.

use super::Plot;
use super::frame::{Axis, Frame, Hold, ROOM, Room, plot};
use crate::report::ReportError;
use crate::report::figures::significant;
use crate::report::paint::Paint;
use crate::survey::{SpectrumView, SurveyResult};

const NAME: &str = "spectrum";
const TITLE: &str = "Modulator noise and the formula";
const HEIGHT: u32 = 380;

/// Returns the plot, or `None` without a spectrum.
pub(super) fn spectrum(result: &SurveyResult) -> Result<Option<Plot>, ReportError> {
    let Some(view) = &result.spectrum else { return Ok(None) };
    let Some(channel) = result.channels.get(view.channel) else { return Ok(None) };
    let curves = curves(view);
    let levels = curves.iter().flat_map(|curve| curve.2.iter().flatten()).copied();
    let (low, high) = levels.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), y| (low.min(y), high.max(y)));
    let (Some(first), Some(last)) = (view.offset_hz.iter().find(|hz| **hz > 0.0), view.offset_hz.last()) else {
        return Ok(None);
    };
    // Deep notches and empty bins would press everything else together: 160 dB below the top is enough.
    let low = low.max(high - 160.0);
    let Some(x) = Axis::log_hz(*first, *last, "offset from the carrier") else { return Ok(None) };
    let Some(y) = Axis::linear(low - 3.0, high + 3.0, "single sideband [dBc/Hz]", |y| significant(y, 6)) else {
        return Ok(None);
    };
    let mut body = String::new();
    let mut frame = Frame::new(&mut body, HEIGHT, Room { right: 22.0, ..ROOM }, x, y);
    frame.heading(TITLE);
    for (_, paint, levels, width) in &curves {
        for stretch in decimated(&frame, &view.offset_hz, levels) {
            frame.line(&stretch, *paint, *width);
        }
    }
    key(&mut frame, &curves);
    frame.finish(NAME)?;
    let missing = if view.total_dbc_per_hz.iter().all(Option::is_none) {
        " The total is unknown on this channel: a noise source is not given."
    } else {
        ""
    };
    let caption = format!(
        "Channel {} (group {}): phase noise of the modulator's sequence and of the formula for an ideal sequence, before \
         the loop, at the VCO; after the loop, at the output.{missing}",
        channel.channel,
        channel.group.chars().take(60).collect::<String>()
    );
    Ok(Some(plot(NAME, TITLE, caption, HEIGHT, &body)))
}

type Curve<'a> = (&'static str, Paint, &'a [Option<f64>], f64);

/// Returns the curves that have any figure, in drawing order.
fn curves(view: &SpectrumView) -> Vec<Curve<'_>> {
    let all: [Curve<'_>; 4] = [
        ("sequence", Paint::Sequence, &view.sequence_dbc_per_hz, 0.8),
        ("formula", Paint::Formula, &view.formula_dbc_per_hz, 1.5),
        ("after the loop", Paint::Modulator, &view.modulator_dbc_per_hz, 1.5),
        ("total at the output", Paint::Total, &view.total_dbc_per_hz, 1.5),
    ];
    all.into_iter().filter(|curve| curve.2.iter().any(Option::is_some)).collect()
}

/// Returns the line in stretches without gaps; each column of the picture keeps its lowest and highest figure, in order.
fn decimated(frame: &Frame<'_>, offset_hz: &[f64], levels: &[Option<f64>]) -> Vec<Vec<(f64, f64)>> {
    let mut stretches = vec![Vec::new()];
    // The column that is being collected: its left edge and its places in order.
    let mut column: Vec<(f64, f64)> = Vec::new();
    let close = |column: &mut Vec<(f64, f64)>, stretch: &mut Vec<(f64, f64)>| {
        let top = (0..column.len()).min_by(|a, b| column[*a].1.total_cmp(&column[*b].1));
        let bottom = (0..column.len()).max_by(|a, b| column[*a].1.total_cmp(&column[*b].1));
        if let (Some(top), Some(bottom)) = (top, bottom) {
            stretch.push(column[top.min(bottom)]);
            if top != bottom {
                stretch.push(column[top.max(bottom)]);
            }
        }
        column.clear();
    };
    let mut gap = false;
    for (offset, level) in offset_hz.iter().zip(levels) {
        let Some(level) = level.filter(|_| *offset > 0.0) else {
            gap = true;
            continue;
        };
        let place = frame.point(*offset, level);
        let new_column = column.first().is_some_and(|first| place.0.floor() > first.0.floor());
        // A gap narrower than a column cannot be seen: the line goes on.
        if new_column && let Some(stretch) = stretches.last_mut() {
            let wide = place.0 - column[column.len() - 1].0 > 1.0;
            close(&mut column, stretch);
            if gap && wide {
                stretches.push(Vec::new());
            }
            gap = false;
        }
        column.push(place);
    }
    if let Some(stretch) = stretches.last_mut() {
        close(&mut column, stretch);
    }
    stretches
}

fn key(frame: &mut Frame<'_>, curves: &[Curve<'_>]) {
    let mut x = frame.field().0;
    for (label, paint, ..) in curves {
        frame.line(&[(x, 35.0), (x + 22.0, 35.0)], *paint, 2.0);
        frame.text(label, (x + 27.0, 30.5), 11.0, Paint::Faint, Hold::Start);
        x += 46.0 + 6.4 * label.chars().count() as f64;
    }
}
