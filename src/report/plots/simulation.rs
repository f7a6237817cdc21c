//! A simulated channel: its density and lines beside the predicted ones; the way after a step.

use super::frame::{Axis, Frame, Hold, ROOM, Room, plot};
use crate::assess::{Settling, SimulatedChannel};
use crate::report::ReportError;
use crate::report::figures::significant;
use crate::report::paint::Paint;

const HEIGHT: u32 = 380;

/// Returns the picture of a simulated channel, or `None` where there is nothing to draw.
pub(crate) fn simulation_svg(found: &SimulatedChannel) -> Result<Option<String>, ReportError> {
    const NAME: &str = "simulation";
    const TITLE: &str = "Simulated in time, and predicted lines, at the VCO";
    let first = found
        .tones
        .iter()
        .map(|tone| tone.offset_hz)
        .chain(found.density.iter().map(|p| p.0))
        .fold(f64::INFINITY, f64::min);
    let Some(last) = found.density.last().map(|point| point.0) else { return Ok(None) };
    let levels = found
        .density
        .iter()
        .map(|point| point.1)
        .chain(found.tones.iter().flat_map(|tone| [tone.predicted_dbc, tone.simulated_dbc]).flatten());
    let (low, high) = levels.fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), y| (l.min(y), h.max(y)));
    let Some(x) = Axis::log_hz(first / 1.3, last * 1.1, "offset from the carrier") else { return Ok(None) };
    let unit = "lines [dBc], density [dBc/Hz], single sideband";
    let Some(y) = Axis::linear(low.max(high - 200.0) - 4.0, high + 6.0, unit, |y| significant(y, 6)) else {
        return Ok(None);
    };
    let bottom = y.low;
    let mut body = String::new();
    let mut frame = Frame::new(&mut body, HEIGHT, Room { right: 22.0, ..ROOM }, x, y);
    frame.heading(TITLE);
    let places: Vec<(f64, f64)> =
        found.density.iter().map(|(offset, level)| frame.point(*offset, level.max(bottom))).collect();
    frame.line(&places, Paint::Sequence, 1.2);
    for tone in &found.tones {
        if let Some(level) = tone.simulated_dbc {
            let (top, foot) = (frame.point(tone.offset_hz, level.max(bottom)), frame.point(tone.offset_hz, bottom));
            frame.line(&[top, foot], Paint::Modulator, 2.0);
            frame.text(&format!("{}", tone.harmonic), (top.0, top.1 - 15.0), 11.0, Paint::Faint, Hold::Middle);
        }
        if let Some(level) = tone.predicted_dbc.filter(|level| *level > bottom) {
            let (x, y) = frame.point(tone.offset_hz, level);
            frame.line(&[(x - 6.0, y), (x + 6.0, y)], Paint::Total, 2.5);
        }
    }
    let left = frame.field().0;
    let key = "blue: density of the record; brown stems: simulated lines h x K/M; violet bars: predicted";
    frame.text(key, (left, 30.5), 11.0, Paint::Faint, Hold::Start);
    frame.finish(NAME)?;
    Ok(Some(plot(NAME, TITLE, key.to_owned(), HEIGHT, &body).file()))
}

/// Returns the picture of a way after a step, or `None` where there is nothing to draw.
pub(crate) fn settling_svg(found: &Settling) -> Result<Option<String>, ReportError> {
    const NAME: &str = "settling";
    const TITLE: &str = "Frequency error at the output after a step";
    let Some(last) = found.samples.last().map(|sample| sample.0) else { return Ok(None) };
    let size = |hz: f64| hz.abs().max(found.tolerance_hz / 100.0).log10();
    let (low, high) =
        found.samples.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), s| (l.min(size(s.1)), h.max(size(s.1))));
    let Some(x) = Axis::linear(0.0, last * 1e6, "time [us]", |t| significant(t, 4)) else { return Ok(None) };
    let show =
        |decade: f64| if (decade - decade.round()).abs() < 1e-9 { format!("1e{decade:.0}") } else { String::new() };
    let Some(y) = Axis::linear(low - 0.2, high + 0.3, "size of the error [Hz]", show) else { return Ok(None) };
    let mut body = String::new();
    let mut frame = Frame::new(&mut body, HEIGHT, Room { right: 22.0, ..ROOM }, x, y);
    frame.heading(TITLE);
    let every = found.samples.len().div_ceil(3000).max(1);
    let places: Vec<(f64, f64)> =
        found.samples.iter().step_by(every).map(|s| frame.point(s.0 * 1e6, size(s.1))).collect();
    let linear: Vec<(f64, f64)> = (found.samples.iter().zip(&found.linear_hz).step_by(every))
        .map(|(s, linear_hz)| frame.point(s.0 * 1e6, size(*linear_hz).max(low)))
        .collect();
    frame.line(&linear, Paint::Total, 1.0);
    frame.line(&places, Paint::Modulator, 1.2);
    let at = found.tolerance_hz.log10();
    let tolerance = [frame.point(0.0, at), frame.point(last * 1e6, at)];
    frame.line(&tolerance, Paint::Guard, 1.2);
    frame.text("tolerance", (tolerance[1].0, tolerance[1].1 - 16.0), 11.0, Paint::Faint, Hold::End);
    frame.finish(NAME)?;
    let caption = "Brown: size of the frequency error at each reference edge, simulated; violet: the continuous linear loop. Below a hundredth of the tolerance both are held.";
    Ok(Some(plot(NAME, TITLE, caption.to_owned(), HEIGHT, &body).file()))
}
