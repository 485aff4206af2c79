//! Where things stand on the drawing, and the smallest pieces of it.

use std::fmt::Write as _;

use borewake_model::units::{Dimension, UnitSystem};

use super::path::Dot;
use super::{LEFT, RIGHT};
use crate::record::Stamp;

/// What all parts of a picture share.
pub(super) struct Frame {
    pub(super) from: Stamp,
    pub(super) to: Stamp,
    pub(super) units: UnitSystem,
}

impl Frame {
    /// Where an instant stands across.
    pub(super) fn x(&self, at: Stamp) -> f64 {
        let span = self.to.seconds() - self.from.seconds();
        if span <= 0.0 {
            return f64::midpoint(LEFT, RIGHT);
        }
        LEFT + (at.seconds() - self.from.seconds()) / span * (RIGHT - LEFT)
    }

    /// A difference of pressures in the unit shown, which has no offset.
    pub(super) fn shown(&self, pascal: f64) -> f64 {
        self.units.number(Dimension::Pressure, pascal)
    }

    pub(super) fn unit(&self) -> &'static str {
        self.units.unit(Dimension::Pressure)
    }
}

/// Where values of a panel stand up and down.
#[derive(Clone, Copy)]
pub(super) struct Scale {
    pub(super) low: f64,
    pub(super) high: f64,
    pub(super) panel: (f64, f64),
}

impl Scale {
    pub(super) fn y(self, value: f64) -> f64 {
        let (top, bottom) = self.panel;
        let share = (value - self.low) / (self.high - self.low);
        // A value far outside stays within what a viewer can take; the clip cuts it.
        (bottom - share * (bottom - top)).clamp(top - 2000.0, bottom + 2000.0)
    }

    /// A scale over values, a little wider than they are.
    pub(super) fn over(low: f64, high: f64, panel: (f64, f64)) -> Self {
        let room = if high > low {
            0.06 * (high - low)
        } else {
            1e-3 * low.abs().max(1.0)
        };
        Self {
            low: low - room,
            high: high + room,
            panel,
        }
    }
}

/// A number in a filled circle.
pub(super) fn badge(svg: &mut String, (x, y): Dot, number: &str) {
    let _ = write!(
        svg,
        "<circle class=\"dot\" cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"12\"/>"
    );
    text(svg, "number", (x, y + 5.0), number);
}

/// Least and greatest of some numbers; `None` of none.
pub(super) fn extent(values: impl Iterator<Item = f64>) -> Option<(f64, f64)> {
    values.fold(None, |found, v| {
        let (low, high) = found.unwrap_or((v, v));
        Some((low.min(v), high.max(v)))
    })
}

pub(super) fn draw(svg: &mut String, class: &str, path: &str) {
    let _ = writeln!(svg, "<path class=\"{class}\" d=\"{path}\"/>");
}

pub(super) fn text(svg: &mut String, class: &str, (x, y): Dot, words: &str) {
    let words = escaped(words);
    let _ = writeln!(
        svg,
        "<text class=\"{class}\" x=\"{x:.1}\" y=\"{y:.1}\">{words}</text>"
    );
}

/// Text that is safe between tags and in quotes.
pub(super) fn escaped(text: &str) -> String {
    text.chars()
        .map(|c| match c {
            '&' => "&amp;".to_owned(),
            '<' => "&lt;".to_owned(),
            '>' => "&gt;".to_owned(),
            '"' => "&quot;".to_owned(),
            // XML has no place for control characters.
            c if c.is_control() => " ".to_owned(),
            c => c.to_string(),
        })
        .collect()
}
