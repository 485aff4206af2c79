//! Pressure change and its slope after a change of rate, on logarithmic scales, readings beside the model.

use std::fmt::Write as _;

use borewake_model::units::{Dimension, UnitSystem};

use super::frame::{draw, escaped, extent, text};
use super::path::{Dot, line};
use super::{LEFT, RIGHT, STYLE, WIDTH};

const TOP: f64 = 116.0;
const BOTTOM: f64 = 560.0;
const HEIGHT: f64 = 622.0;
/// Decades that are shown below the largest value at most.
const DECADES: f64 = 4.0;

/// A change of rate as a log-log plot shows it.
#[derive(Debug, Clone, PartialEq)]
pub struct LogLog {
    /// Heading.
    pub title: String,
    /// How pressures are shown.
    pub units: UnitSystem,
    /// Time since the change \[s\] and pressure change \[Pa\], positive the way the rate went.
    pub points: Vec<(f64, f64)>,
    /// The same with the slope of pressure in superposition time \[Pa\].
    pub slopes: Vec<(f64, f64)>,
    /// The model's pressure change.
    pub model: Vec<(f64, f64)>,
    /// The model's slope.
    pub model_slopes: Vec<(f64, f64)>,
}

/// Draws it. What is not positive has no place on a logarithmic scale and is left out; a picture of nothing says so.
#[must_use]
pub fn log_log_plot(plot: &LogLog) -> String {
    let title = escaped(&plot.title);
    let mut svg = format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {WIDTH} {HEIGHT}\" role=\"img\" aria-label=\"{title}\">\n\
<title>{title}</title>\n<style>{STYLE}{MARKS}</style>\n\
<rect class=\"paper\" width=\"{WIDTH}\" height=\"{HEIGHT}\"/>\n\
<text class=\"title\" x=\"16\" y=\"32\">{title}</text>\n\
<g class=\"legend\"><circle class=\"full\" cx=\"26\" cy=\"62\" r=\"5\"/><text x=\"42\" y=\"68\">change</text>\
<circle class=\"hollow\" cx=\"184\" cy=\"62\" r=\"5\"/><text x=\"200\" y=\"68\">its slope in ln time</text>\
<path class=\"expectation\" d=\"M520 62h34\"/><text x=\"562\" y=\"68\">model</text></g>\n"
    );
    let series = [&plot.points, &plot.slopes, &plot.model, &plot.model_slopes];
    let shown = |pascal: f64| plot.units.number(Dimension::Pressure, pascal);
    let sound = |&(t, p): &(f64, f64)| {
        let good = t.is_finite() && t > 0.0 && p.is_finite() && p > 0.0;
        good.then(|| ((t / 3600.0).log10(), shown(p).log10()))
    };
    let dots: Vec<Vec<Dot>> = series
        .iter()
        .map(|s| s.iter().filter_map(sound).collect())
        .collect();
    let all = || dots.iter().flatten();
    let (Some((left, right)), Some((low, high))) =
        (extent(all().map(|d| d.0)), extent(all().map(|d| d.1)))
    else {
        text(&mut svg, "label", (LEFT, TOP + 40.0), "nothing to show");
        return svg + "</svg>\n";
    };
    let frame = Axes {
        across: (left.floor(), right.ceil().max(left.floor() + 1.0)),
        up: (
            low.max(high - DECADES).floor(),
            high.ceil().max(low.floor() + 1.0),
        ),
    };
    frame.grid(&mut svg, plot.units.unit(Dimension::Pressure));
    let _ = write!(
        svg,
        "<clipPath id=\"loglog\"><rect x=\"{LEFT}\" y=\"{TOP}\" width=\"{}\" height=\"{}\"/></clipPath><g clip-path=\"url(#loglog)\">",
        RIGHT - LEFT,
        BOTTOM - TOP
    );
    if let [points, slopes, model, model_slopes] = dots.as_slice() {
        for curve in [model, model_slopes] {
            let path: Vec<Dot> = curve.iter().map(|d| frame.at(*d)).collect();
            draw(&mut svg, "expectation", &line(&path));
        }
        for (class, points) in [("full", points), ("hollow", slopes)] {
            for (x, y) in points.iter().map(|d| frame.at(*d)) {
                let _ = writeln!(
                    svg,
                    "<circle class=\"{class}\" cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"4\"/>"
                );
            }
        }
    }
    svg + "</g>\n</svg>\n"
}

/// Readings stand out from the model by shape.
const MARKS: &str = ".full{fill:#17212b}.hollow{fill:#fff;stroke:#c8431b;stroke-width:1.8}\
.minor{stroke:#eef1f3;stroke-width:1;fill:none}\
@media (max-width:560px){.hollow{stroke-width:3}}";

/// Decades across and up.
struct Axes {
    across: (f64, f64),
    up: (f64, f64),
}

impl Axes {
    fn at(&self, (x, y): Dot) -> Dot {
        let share = |value: f64, (from, to): (f64, f64)| (value - from) / (to - from);
        (
            LEFT + share(x, self.across) * (RIGHT - LEFT),
            (BOTTOM - share(y, self.up) * (BOTTOM - TOP)).clamp(TOP - 2000.0, BOTTOM + 2000.0),
        )
    }

    fn grid(&self, svg: &mut String, unit: &str) {
        let vertical = |x: f64| {
            let x = self.at((x, 0.0)).0;
            line(&[(x, TOP), (x, BOTTOM)])
        };
        let level = |y: f64| {
            let y = self.at((0.0, y)).1;
            line(&[(LEFT, y), (RIGHT, y)])
        };
        for decade in decades(self.across) {
            for part in 2..10 {
                let x = decade + f64::from(part).log10();
                if x < self.across.1 {
                    draw(svg, "minor", &vertical(x));
                }
            }
        }
        for decade in decades(self.up) {
            for part in 2..10 {
                let y = decade + f64::from(part).log10();
                if y < self.up.1 {
                    draw(svg, "minor", &level(y));
                }
            }
        }
        for decade in decades(self.across) {
            draw(svg, "grid", &vertical(decade));
            let (x, _) = self.at((decade, 0.0));
            // The last one would be cut in half.
            let (class, x) = if x > RIGHT - 20.0 {
                ("value", RIGHT)
            } else {
                ("time", x)
            };
            text(svg, class, (x, BOTTOM + 24.0), &power(decade));
        }
        for decade in decades(self.up) {
            draw(svg, "grid", &level(decade));
            let (_, y) = self.at((0.0, decade));
            text(svg, "value", (LEFT - 8.0, y + 6.0), &power(decade));
        }
        let _ = writeln!(
            svg,
            "<rect class=\"frame\" x=\"{LEFT}\" y=\"{TOP}\" width=\"{}\" height=\"{}\"/>",
            RIGHT - LEFT,
            BOTTOM - TOP
        );
        let what = format!("pressure change and slope, {unit}");
        text(svg, "label", (LEFT, TOP - 12.0), &what);
        let middle = f64::midpoint(LEFT, RIGHT);
        text(
            svg,
            "time",
            (middle, BOTTOM + 52.0),
            "hours since the rate changed",
        );
    }
}

/// Whole powers of ten within a range.
fn decades((from, to): (f64, f64)) -> impl Iterator<Item = f64> {
    (0..24_u32)
        .map(move |k| from + f64::from(k))
        .take_while(move |d| *d <= to + 1e-9)
}

/// A power of ten as people write it.
fn power(exponent: f64) -> String {
    let value = 10_f64.powf(exponent);
    if (-3.0..=5.0).contains(&exponent) {
        let decimals = usize::from(exponent < -0.5) * 3;
        let text = format!("{value:.decimals$}");
        if text.contains('.') {
            return text.trim_end_matches('0').trim_end_matches('.').to_owned();
        }
        return text;
    }
    format!("1e{exponent:.0}")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn plot(points: Vec<(f64, f64)>) -> LogLog {
        LogLog {
            title: "<Q-1> & more".to_owned(),
            units: UnitSystem::Metric,
            slopes: points.iter().map(|&(t, p)| (t, 0.1 * p)).collect(),
            model: points.clone(),
            model_slopes: Vec::new(),
            points,
        }
    }

    #[test]
    fn decades_are_labelled_and_names_stay_names() {
        let svg = log_log_plot(&plot(
            (0..40)
                .map(|k| (600.0 * 1.2_f64.powi(k), 1e4 + 1e3 * f64::from(k)))
                .collect(),
        ));
        for part in [
            "&lt;Q-1&gt; &amp; more",
            ">0.1</text>",
            ">10</text>",
            ">1000</text>",
            "slope, kPa",
            "hours since",
        ] {
            assert!(svg.contains(part), "{part}: {svg}");
        }
        assert_eq!(
            svg.matches("class=\"full\"").count(),
            41,
            "and the legend's"
        );
    }

    #[test]
    fn what_has_no_logarithm_is_left_out() {
        let svg = log_log_plot(&plot(vec![
            (0.0, 1.0),
            (60.0, -5.0),
            (f64::NAN, 3.0),
            (60.0, f64::INFINITY),
        ]));
        assert!(svg.contains("nothing to show"), "{svg}");
        let one = log_log_plot(&plot(vec![(60.0, 5.0), (0.0, 1.0)]));
        for wrong in ["NaN", "inf"] {
            assert!(!one.contains(wrong), "{one}");
        }
    }
}
