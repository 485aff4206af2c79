//! What a picture holds, whatever it is given.

use proptest::prelude::*;

use super::*;

/// An invented gauge: hourly over 60 days, a rate change at day 20, a departure that grows from day 40, a gap.
fn invented() -> GaugePlot {
    let start = Stamp::parse("2031-04-15T00:00:00Z").unwrap();
    let points = (0..1440)
        .map(|n| {
            let day = f64::from(n) / 24.0;
            let mean = 15.2e6 + 9e4 * (1.0 + day).ln() - 2e5 * (day - 20.0).max(0.0).sqrt() / 6.0;
            let wobble = 60.0 * (f64::from(n) * 12.9898).sin() + 40.0 * (f64::from(n) * 0.61).cos();
            let leak = -900.0 * ((day - 40.0).max(0.0) / 10.0).min(1.5);
            let sd = 90.0 + 40.0 * (-(day - 20.0).abs()).exp();
            let there = !(28.0..30.0).contains(&day);
            PlotPoint {
                at: start.plus(i64::from(n) * 3600 * Stamp::SECOND),
                reading: there.then_some(mean + wobble + leak),
                expectation: Some(Expectation { mean, sd }),
            }
        })
        .collect();
    let mark = |day: i64, words: &str| (start.plus(day * 86_400 * Stamp::SECOND), words.to_owned());
    GaugePlot {
        title: "O-2, Sorrel Flat (invented)".to_owned(),
        units: UnitSystem::Metric,
        points,
        marks: vec![
            mark(41, "onset of the leak (sd 0.8 d)"),
            mark(44, "alarm: leak, 24 m3/d"),
        ],
    }
}

#[test]
fn a_picture_names_its_parts_and_units() {
    let svg = gauge_plot(&invented());
    for part in [
        "<title>O-2, Sorrel Flat (invented)</title>",
        ">reading</text>",
        ">expectation</text>",
        ">95 % band</text>",
        ">pressure, kPa</text>",
        ">departure, kPa</text>",
        ">time in UTC, 2031-04-15 to 2031-06-13</text>",
        ">2031-05-29 00:00  alarm: leak, 24 m3/d</text>",
        "class=\"beyond\"",
    ] {
        assert!(svg.contains(part), "{part}");
    }
    assert!(svg.len() < 150_000, "{}", svg.len());
}

#[test]
fn a_picture_of_nothing_says_so() {
    let empty = GaugePlot {
        points: Vec::new(),
        ..invented()
    };
    assert!(gauge_plot(&empty).contains("nothing was read"));
    let blank = GaugePlot {
        points: vec![PlotPoint {
            at: Stamp(0),
            reading: None,
            expectation: None,
        }],
        ..invented()
    };
    assert!(gauge_plot(&blank).contains("nothing was read"));
}

#[test]
fn text_is_escaped() {
    let odd = GaugePlot {
        title: "<script>\"&\u{7}".to_owned(),
        ..invented()
    };
    let svg = gauge_plot(&odd);
    assert!(svg.contains("<title>&lt;script&gt;&quot;&amp; </title>"));
}

fn number() -> impl Strategy<Value = f64> {
    prop_oneof![any::<f64>(), -1e7..1e7, Just(0.0)]
}

proptest! {
    #[test]
    fn no_numbers_break_a_picture(
        series in prop::collection::vec((any::<i64>(), number(), number(), number(), any::<bool>()), 0..40),
    ) {
        let points = series.into_iter().map(|(at, reading, mean, sd, there)| PlotPoint {
            at: Stamp(at),
            reading: there.then_some(reading),
            expectation: Some(Expectation { mean, sd }),
        });
        let mut points: Vec<PlotPoint> = points.collect();
        points.sort_by_key(|p| p.at);
        let marks = vec![(Stamp(0), "zero".to_owned())];
        let svg = gauge_plot(&GaugePlot { points, marks, ..invented() });
        for wrong in ["NaN", "inf", "-inf"] {
            let stands = svg.split('"').skip(1).step_by(2).any(|v| v.contains(wrong));
            prop_assert!(!stands, "{wrong}: {svg}");
        }
    }
}
