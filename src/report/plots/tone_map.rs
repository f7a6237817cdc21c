//! The strongest tone in every stretch of channel and offset.

use super::Plot;
use super::frame::{Axis, ChannelAxis, Frame, Hold, ROOM, Room, plot, round_step};
use crate::report::ReportError;
use crate::report::paint::{LEVEL_STEPS, Paint};
use crate::survey::SurveyResult;

const NAME: &str = "tone-map";
const TITLE: &str = "Tones over channel and offset";
const HEIGHT: u32 = 400;

/// Offset cells of the map.
const ROWS: usize = 104;

/// Lower end of the strongest step \[dBc\]; each step below is `STEP_DB` lower.
const TOP_DBC: f64 = -40.0;
const STEP_DB: f64 = 10.0;

/// What a cell shows, weakest first.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
enum Shown {
    Nothing,
    Unknown,
    Level(u8),
}

/// Returns the step of the scale for a level.
fn step_of(level_dbc: f64) -> u8 {
    let last = LEVEL_STEPS - 1;
    (0..last).find(|down| level_dbc >= TOP_DBC - STEP_DB * f64::from(*down)).map_or(0, |down| last - down)
}

/// Returns the cell, from 0, in which a share of an axis falls.
fn cell(share: f64, cells: usize) -> usize {
    (1..cells).take_while(|edge| share >= *edge as f64 / cells as f64).count()
}

/// Returns the plot, or `None` where no tone is listed.
pub(super) fn tone_map(result: &SurveyResult) -> Result<Option<Plot>, ReportError> {
    let tones = result.channels.iter().flat_map(|channel| &channel.tones);
    let offsets = tones.map(|tone| tone.offset_hz).filter(|hz| hz.is_finite() && *hz > 0.0);
    let (low, high) = offsets.fold((f64::INFINITY, 0.0f64), |(low, high), hz| (low.min(hz), high.max(hz)));
    let edge = result.channels.iter().filter_map(|channel| channel.loop_edge_hz).fold(f64::INFINITY, f64::min);
    // Tones far below the loop edge share the lowest row, so that a single one does not press the rest together.
    let floor = if edge.is_finite() { (low / 1.1).max(round_step(edge / 1500.0)) } else { low / 1.1 };
    let Some(mut y) = Axis::log_hz(floor, high * 1.1, "offset from the carrier") else { return Ok(None) };
    y.mark_held(low < floor);
    let Some(along) = ChannelAxis::new(&result.channels) else { return Ok(None) };
    let mut body = String::new();
    let room = Room { right: 18.0, top: 62.0, ..ROOM };
    let mut frame = Frame::new(&mut body, HEIGHT, room, along.axis.clone(), y);
    frame.heading(TITLE);
    scale_key(&mut frame);
    let cells = filled(result, &along, &frame.y);
    draw(&mut frame, &cells, along.columns);
    frame.finish(NAME)?;
    let caption = format!(
        "Every listed tone by channel and offset; the colour is its level at the output, single sideband, the strongest \
         of each cell. Tones whose level is unknown have a colour of their own: their place is known, their strength \
         is not. Known tones below {:.0} dBc are left out.",
        result.plan.analysis.tone_floor_dbc
    );
    Ok(Some(plot(NAME, TITLE, caption.replace('-', "−"), HEIGHT, &body)))
}

/// Returns the cells, column by column, from the lowest offset up.
fn filled(result: &SurveyResult, along: &ChannelAxis, y: &Axis) -> Vec<Shown> {
    let mut cells = vec![Shown::Nothing; along.columns * ROWS];
    for (position, channel) in result.channels.iter().enumerate() {
        let column = cell(along.axis.share(along.at(position, channel)), along.columns);
        for tone in channel.tones.iter().filter(|tone| tone.offset_hz > 0.0) {
            let row = cell(y.share(tone.offset_hz), ROWS);
            let shown = tone.level_dbc.map_or(Shown::Unknown, |level| Shown::Level(step_of(level)));
            let place = &mut cells[column * ROWS + row];
            *place = shown.max(*place);
        }
    }
    cells
}

/// Draws the cells, one colour after the other so that each becomes one path; equal neighbours become one block.
fn draw(frame: &mut Frame<'_>, cells: &[Shown], columns: usize) {
    let (left, top, right, bottom) = frame.field();
    let (wide, high) = ((right - left) / columns as f64, (bottom - top) / ROWS as f64);
    let paints = std::iter::once((Shown::Unknown, Paint::Unknown))
        .chain((0..LEVEL_STEPS).map(|step| (Shown::Level(step), Paint::Level(step))));
    for (shown, paint) in paints {
        for (column, cells) in cells.chunks(ROWS).enumerate() {
            let mut row = 0;
            while row < ROWS {
                let x = left + wide * column as f64;
                let mut run = cells[row..].iter().take_while(|cell| **cell == shown).count();
                // Unknown cells are thin strokes: texture tells them from levels where colour does not.
                let thin = if shown == Shown::Unknown { 0.3 * high } else { 0.0 };
                if shown == Shown::Unknown {
                    run = run.min(1);
                }
                if run > 0 {
                    let from = (x, bottom - high * (row + run) as f64 + thin);
                    frame.block(from, (x + wide, bottom - high * row as f64 - thin), paint);
                }
                row += run.max(1);
            }
        }
    }
}

fn scale_key(frame: &mut Frame<'_>) {
    let (wide, y) = (44.0, 32.0);
    let left = frame.field().0;
    frame.block((left, y), (left + wide, y + 9.0), Paint::Unknown);
    frame.text("unknown", (left, y + 13.0), 10.0, Paint::Faint, Hold::Start);
    let start = left + wide + 14.0;
    for step in 0..LEVEL_STEPS {
        let x = start + wide * f64::from(step);
        frame.block((x, y), (x + wide, y + 9.0), Paint::Level(step));
        if step > 0 {
            let lower = TOP_DBC - STEP_DB * f64::from(LEVEL_STEPS - 1 - step);
            frame.text(&format!("−{:.0}", -lower), (x, y + 13.0), 10.0, Paint::Faint, Hold::Middle);
        }
    }
    frame.text("dBc", (start + wide * f64::from(LEVEL_STEPS) + 6.0, y), 10.0, Paint::Faint, Hold::Start);
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn steps_hold_their_lower_end() {
        assert_eq!([-20.0, -40.0, -40.1, -50.0, -99.9, -100.0, -100.1, -300.0].map(step_of), [7, 7, 6, 6, 1, 1, 0, 0]);
    }

    #[test]
    fn cells_cover_the_axis() {
        assert_eq!([0.0, 0.24, 0.25, 0.99, 1.0].map(|share| cell(share, 4)), [0, 0, 1, 3, 3]);
    }
}
