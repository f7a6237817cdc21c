//! Axes: ranges that are checked before anything is drawn, ticks, labels, and the way from figures to the picture.

use std::convert::Infallible;

use plotters::coord::Shift;
use plotters::prelude::*;
use plotters::style::text_anchor::{HPos, Pos, VPos};

use crate::assess::{ChannelResult, Verdict};
use crate::report::ReportError;
use crate::report::figures::{count, significant, with_prefix};
use crate::report::paint::Paint;
use crate::report::svg_backend::{SCALE, SvgBackend, picture};

/// Width of every plot.
pub(super) const WIDTH: u32 = 760;

type Area<'a> = DrawingArea<SvgBackend<'a>, Shift>;

/// How figures are spread over an axis.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Scale {
    Linear,
    Log,
}

/// One axis with a checked range: finite, not empty, positive when logarithmic.
#[derive(Debug, Clone)]
pub(super) struct Axis {
    pub low: f64,
    pub high: f64,
    pub scale: Scale,
    pub ticks: Vec<(f64, String)>,
    pub title: String,
}

impl Axis {
    /// Returns an axis whose ticks are round figures, each shown by `show`.
    pub(super) fn linear(low: f64, high: f64, title: &str, show: impl Fn(f64) -> String) -> Option<Self> {
        let range = high - low;
        if !range.is_finite() || range <= 0.0 {
            return None;
        }
        let step = round_step(range / 6.0);
        let ticks = steps(low / step, high / step).map(|tick| tick * step).map(|tick| (tick, show(tick))).collect();
        Some(Self { low, high, scale: Scale::Linear, ticks, title: title.to_owned() })
    }

    /// Returns a logarithmic axis over whole decades' ticks, in hertz with prefixes.
    pub(super) fn log_hz(low: f64, high: f64, title: &str) -> Option<Self> {
        if !(low > 0.0 && high > low && high.is_finite()) {
            return None;
        }
        let ticks = steps(low.log10(), high.log10())
            .map(|decade| 10f64.powf(decade))
            .map(|tick| (tick, with_prefix(tick, "Hz", 3)))
            .collect();
        Some(Self { low, high, scale: Scale::Log, ticks, title: title.to_owned() })
    }

    /// Labels the low end as "this or lower" where figures below it are drawn on it.
    pub(super) fn mark_held(&mut self, any: bool) {
        if any {
            let near = self.low * (self.high / self.low).powf(0.05);
            self.ticks.retain(|(tick, _)| *tick > near);
            self.ticks.push((self.low, format!("≤ {}", with_prefix(self.low, "Hz", 2))));
        }
    }

    /// Returns where a figure lies between 0 (low end) and 1 (high end), held at the ends.
    pub(super) fn share(&self, value: f64) -> f64 {
        let share = match self.scale {
            Scale::Linear => (value - self.low) / (self.high - self.low),
            Scale::Log if value <= 0.0 => 0.0,
            Scale::Log => (value / self.low).ln() / (self.high / self.low).ln(),
        };
        share.clamp(0.0, 1.0)
    }
}

/// Returns the whole numbers from `low` to `high`; a hair of slack keeps the ends of round ranges.
fn steps(low: f64, high: f64) -> impl Iterator<Item = f64> {
    let (first, last) = ((low - 1e-9).ceil(), (high + 1e-9).floor());
    (0..1000u32).map(move |step| first + f64::from(step)).take_while(move |step| *step <= last)
}

/// Returns 1, 2 or 5 times a power of ten, at or above the given step.
pub(super) fn round_step(step: f64) -> f64 {
    let decade = 10f64.powf(step.log10().floor());
    [1.0, 2.0, 5.0]
        .into_iter()
        .map(|digit| digit * decade)
        .find(|round| *round >= step * (1.0 - 1e-9))
        .unwrap_or(10.0 * decade)
}

/// Where channels stand along an axis.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Place {
    /// By channel frequency.
    Frequency,
    /// By position in the plan: groups lie so far apart that frequencies would leave most of the width empty.
    Position,
}

/// The channel axis that the plots over the plan share.
#[derive(Debug, Clone)]
pub(super) struct ChannelAxis {
    pub axis: Axis,
    /// Columns that a map should have: one for each channel, or as many as can be told apart.
    pub columns: usize,
    place: Place,
}

impl ChannelAxis {
    /// Returns the axis, or `None` without channels.
    pub(super) fn new(channels: &[ChannelResult]) -> Option<Self> {
        let mut sorted: Vec<f64> = channels.iter().map(|channel| channel.channel_hz).collect();
        sorted.sort_by(f64::total_cmp);
        let (first, last) = (*sorted.first()?, *sorted.last()?);
        let widest = sorted.windows(2).map(|pair| pair[1] - pair[0]).fold(0.0, f64::max);
        let place = if sorted.len() > 4 && widest > 0.25 * (last - first) { Place::Position } else { Place::Frequency };
        let (low, high) = match place {
            Place::Frequency => (first, last),
            Place::Position => (1.0, sorted.len() as f64),
        };
        let half = if high > low { (high - low) / (sorted.len() - 1) as f64 / 2.0 } else { 500.0 };
        let (low, high) = (low - half, high + half);
        let axis = match place {
            Place::Frequency => {
                let step = round_step((high - low) / 6.0);
                let decimals = (0..9usize).find(|d| step / 1e6 * 10f64.powf(*d as f64) > 0.999).unwrap_or(9);
                Axis::linear(low, high, "channel [MHz]", |hz| format!("{:.decimals$}", hz / 1e6))
            }
            Place::Position => {
                let title = "channel, in plan order (the groups lie far apart)";
                let mut axis = Axis::linear(low, high, title, |at| significant(at, 9))?;
                axis.ticks.retain(|(tick, _)| tick.fract() == 0.0 && *tick >= 1.0);
                Some(axis)
            }
        }?;
        Some(Self { axis, columns: sorted.len().min(320), place })
    }

    /// Returns the figure of a channel on the axis; `position` counts from 0 in plan order.
    pub(super) fn at(&self, position: usize, channel: &ChannelResult) -> f64 {
        match self.place {
            Place::Frequency => channel.channel_hz,
            Place::Position => position as f64 + 1.0,
        }
    }
}

/// Room for the plotting field inside a plot, in picture units from its edges.
#[derive(Debug, Clone, Copy)]
pub(super) struct Room {
    pub left: f64,
    pub right: f64,
    pub top: f64,
    pub bottom: f64,
}

/// The usual room: title and legend above, labels left and below, direct labels on the right.
pub(super) const ROOM: Room = Room { left: 66.0, right: 92.0, top: 50.0, bottom: 46.0 };

/// Where text is held.
#[derive(Debug, Clone, Copy)]
pub(super) enum Hold {
    Start,
    Middle,
    End,
}

/// A plot that is being drawn.
pub(super) struct Frame<'a> {
    area: Area<'a>,
    pub x: Axis,
    pub y: Axis,
    room: Room,
    size: (f64, f64),
    failed: Option<String>,
}

/// Returns a length of the picture in the steps of the drawing crate.
fn pixel(length: f64) -> i32 {
    let steps = (length * f64::from(SCALE)).round().clamp(-1e6, 1e6);
    #[allow(clippy::cast_possible_truncation, reason = "a whole number within a million of zero")]
    let steps = steps as i32;
    steps
}

impl<'a> Frame<'a> {
    /// Returns a frame with its grid, ticks and axis titles drawn.
    pub(super) fn new(body: &'a mut String, height: u32, room: Room, x: Axis, y: Axis) -> Self {
        let area = SvgBackend::new(body, (WIDTH, height)).into_drawing_area();
        let mut frame = Self { area, x, y, room, size: (f64::from(WIDTH), f64::from(height)), failed: None };
        frame.grid();
        frame
    }

    /// Returns the plotting field: left, top, right, bottom.
    pub(super) fn field(&self) -> (f64, f64, f64, f64) {
        (self.room.left, self.room.top, self.size.0 - self.room.right, self.size.1 - self.room.bottom)
    }

    /// Returns the place of a pair of figures in the picture.
    pub(super) fn point(&self, x: f64, y: f64) -> (f64, f64) {
        let (left, top, right, bottom) = self.field();
        (left + (right - left) * self.x.share(x), bottom - (bottom - top) * self.y.share(y))
    }

    fn note<E: std::fmt::Debug>(&mut self, drawn: Result<(), E>) {
        if let Err(error) = drawn {
            self.failed.get_or_insert(format!("{error:?}"));
        }
    }

    fn grid(&mut self) {
        let (left, top, right, bottom) = self.field();
        for (tick, label) in self.x.ticks.clone() {
            let x = self.point(tick, self.y.low).0;
            self.line(&[(x, top), (x, bottom)], Paint::Grid, 0.7);
            self.text(&label, (x, bottom + 6.0), 10.5, Paint::Faint, Hold::Middle);
        }
        for (tick, label) in self.y.ticks.clone() {
            let y = self.point(self.x.low, tick).1;
            self.line(&[(left, y), (right, y)], Paint::Grid, 0.7);
            self.text(&label, (left - 7.0, y - 4.0), 10.5, Paint::Faint, Hold::End);
        }
        self.line(&[(left, bottom), (right, bottom)], Paint::Faint, 0.9);
        let (x_title, y_title) = (self.x.title.clone(), self.y.title.clone());
        self.text(&x_title, ((left + right) / 2.0, bottom + 25.0), 11.0, Paint::Faint, Hold::Middle);
        let style = ("sans-serif", pixel(11.0))
            .into_font()
            .transform(FontTransform::Rotate270)
            .color(&Paint::Faint.token())
            .pos(Pos::new(HPos::Center, VPos::Top));
        let drawn = self.area.draw(&Text::new(y_title, (pixel(4.0), pixel((top + bottom) / 2.0)), style));
        self.note(drawn);
    }

    /// Draws a line through places of the picture.
    pub(super) fn line(&mut self, places: &[(f64, f64)], paint: Paint, width: f64) {
        if places.len() < 2 {
            return;
        }
        let points: Vec<_> = places.iter().map(|(x, y)| (pixel(*x), pixel(*y))).collect();
        let style = paint.token().stroke_width(pixel(width).unsigned_abs());
        let drawn = self.area.draw(&PathElement::new(points, style));
        self.note(drawn);
    }

    /// Draws a filled rectangle between two places of the picture.
    pub(super) fn block(&mut self, from: (f64, f64), to: (f64, f64), paint: Paint) {
        let corners = [(pixel(from.0), pixel(from.1)), (pixel(to.0), pixel(to.1))];
        let drawn = self.area.draw(&Rectangle::new(corners, paint.token().filled()));
        self.note(drawn);
    }

    /// Draws text whose top is at a place of the picture.
    pub(super) fn text(&mut self, text: &str, place: (f64, f64), size: f64, paint: Paint, hold: Hold) {
        let hold = match hold {
            Hold::Start => HPos::Left,
            Hold::Middle => HPos::Center,
            Hold::End => HPos::Right,
        };
        let style = ("sans-serif", pixel(size)).into_font().color(&paint.token()).pos(Pos::new(hold, VPos::Top));
        let drawn = self.area.draw(&Text::new(text.to_owned(), (pixel(place.0), pixel(place.1)), style));
        self.note(drawn);
    }

    /// Draws the mark of a verdict: dot, triangle, square; the same shapes stand in the page's tables.
    pub(super) fn mark(&mut self, (x, y): (f64, f64), verdict: Verdict) {
        let token = super::paint_of(verdict).token();
        let drawn: Result<(), DrawingAreaErrorKind<Infallible>> = match verdict {
            Verdict::Clear => self.area.draw(&Circle::new((pixel(x), pixel(y)), pixel(1.5), token.filled())),
            Verdict::Marginal => {
                let corners = [(x, y - 2.9), (x + 2.6, y + 1.9), (x - 2.6, y + 1.9)];
                let corners: Vec<_> = corners.iter().map(|(x, y)| (pixel(*x), pixel(*y))).collect();
                self.area.draw(&Polygon::new(corners, token.filled()))
            }
            Verdict::Bad => {
                let corners = [(pixel(x - 2.2), pixel(y - 2.2)), (pixel(x + 2.2), pixel(y + 2.2))];
                self.area.draw(&Rectangle::new(corners, token.filled()))
            }
        };
        self.note(drawn);
    }

    /// Draws title and, on the right of the same line, the three verdict marks with their counts.
    pub(super) fn heading(&mut self, title: &str) {
        let left = self.room.left;
        self.text(title, (left, 6.0), 14.0, Paint::Ink, Hold::Start);
    }

    /// Draws the verdict marks with their counts under the title.
    pub(super) fn verdict_key(&mut self, counts: [(Verdict, u64); 3]) {
        let mut x = self.room.left + 3.0;
        for (verdict, number) in counts {
            self.mark((x, 34.0), verdict);
            let label = format!("{} {}", verdict.word(), count(number));
            self.text(&label, (x + 8.0, 29.5), 11.0, Paint::Faint, Hold::Start);
            x += 26.0 + 6.6 * label.chars().count() as f64;
        }
    }

    /// Draws the verdict marks with their words, from a place on.
    pub(super) fn verdict_words(&mut self, (mut x, y): (f64, f64), verdicts: &[Verdict]) {
        for verdict in verdicts {
            self.mark((x + 3.0, y + 4.5), *verdict);
            self.text(verdict.word(), (x + 11.0, y), 11.0, Paint::Faint, Hold::Start);
            x += 30.0 + 6.6 * verdict.word().chars().count() as f64;
        }
    }

    /// Ends the drawing.
    pub(super) fn finish(mut self, plot: &'static str) -> Result<(), ReportError> {
        let drawn = self.area.present();
        self.note(drawn);
        match self.failed.take() {
            None => Ok(()),
            Some(found) => Err(ReportError::Plot { plot, found }),
        }
    }
}

/// Returns a finished plot from its drawn body.
pub(super) fn plot(name: &'static str, title: &'static str, caption: String, height: u32, body: &str) -> super::Plot {
    let size = (WIDTH, height);
    let svg = picture(size, name, title, &caption, body);
    super::Plot { name, caption, size, svg }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn refuses_ranges_that_cannot_be_drawn() {
        let show = |value: f64| value.to_string();
        for (low, high) in [(0.0, 0.0), (1.0, 0.0), (0.0, f64::INFINITY), (f64::NAN, 1.0), (0.0, f64::NAN)] {
            assert!(Axis::linear(low, high, "", show).is_none(), "{low} {high}");
            assert!(Axis::log_hz(low, high, "").is_none(), "{low} {high}");
        }
        assert!(Axis::log_hz(-1.0, 10.0, "").is_none());
    }

    #[test]
    fn ticks_are_round_and_inside() {
        let axis = Axis::linear(433.07, 434.8, "", |value| format!("{value:.1}")).unwrap();
        let labels: Vec<_> = axis.ticks.iter().map(|(_, label)| label.as_str()).collect();
        assert_eq!(labels, ["433.5", "434.0", "434.5"]);
        let axis = Axis::log_hz(100.0, 2e6, "").unwrap();
        let labels: Vec<_> = axis.ticks.iter().map(|(_, label)| label.as_str()).collect();
        assert_eq!(labels, ["100 Hz", "1 kHz", "10 kHz", "100 kHz", "1 MHz"]);
        assert!((axis.share(1e4) - 2.0 / (2e4f64).log10()).abs() < 1e-12);
    }
}
