//! Pressure change and its derivative after a change of rate, as test analysis looks at them.
//!
//! In radial flow pressure grows in proportion to the logarithm of time, so its derivative by that logarithm stands still
//! at `dq / 4 pi T`: storage, skin, boundaries and layers show as what comes before and after. After earlier changes of
//! rate the logarithm of time gives way to superposition time. The derivative of readings is taken between points at
//! least a distance L apart, which trades noise for detail. Source: Bourdet, Ayoub & Pirard 1989, SPE Formation
//! Evaluation 4 (2).

/// A rate that holds from an instant on.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Level {
    /// When it begins \[s\].
    pub from: f64,
    /// Rate into the ground \[m3/s\].
    pub rate: f64,
}

/// A change of rate and the constant rate after it.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Change {
    /// Order of the level it leads to.
    pub level: usize,
    /// When \[s\].
    pub at: f64,
    /// How long the rate then held \[s\].
    pub held: f64,
    /// By how much \[m3/s\].
    pub by: f64,
}

/// Levels of a rate that wavers: a piece within `tolerance` \[m3/s\] of the running mean of its level belongs to it.
///
/// `pieces` are `(from, rate)`, ascending; the last one ends at `end` \[s\].
#[must_use]
pub fn levels(pieces: &[(f64, f64)], end: f64, tolerance: f64) -> Vec<Level> {
    let mut levels: Vec<Level> = Vec::new();
    let mut held = 0.0;
    let ends = pieces.iter().skip(1).map(|p| p.0).chain([end]);
    for (&(from, rate), until) in pieces.iter().zip(ends) {
        let length = (until - from).max(0.0);
        match levels.last_mut() {
            Some(level) if (rate - level.rate).abs() <= tolerance => {
                held += length;
                if held > 0.0 {
                    level.rate += (rate - level.rate) * length / held;
                }
            }
            _ => {
                levels.push(Level { from, rate });
                held = length;
            }
        }
    }
    levels
}

/// Changes of at least `least` \[m3/s\] after which the rate held for at least `long` \[s\], in order of time. Before the
/// first level nothing is known, so it is no change.
#[must_use]
pub fn changes(levels: &[Level], end: f64, least: f64, long: f64) -> Vec<Change> {
    levels
        .windows(2)
        .enumerate()
        .filter_map(|(before, pair)| {
            let &[a, b] = pair else { return None };
            let until = levels.get(before + 2).map_or(end, |next| next.from);
            let change = Change {
                level: before + 1,
                at: b.from,
                held: until - b.from,
                by: b.rate - a.rate,
            };
            (change.by.abs() >= least && change.held >= long).then_some(change)
        })
        .collect()
}

/// Superposition time a while `dt` \[s, positive\] after a change: the logarithm of time where nothing flowed before, else
/// what takes its place, so that pressure in radial flow is linear in it with the slope of the change alone.
///
/// `sum over earlier levels i of (q_i - q_(i-1)) / (q_n - q_(n-1)) ln(t_n - t_i + dt) + ln dt`. What flowed before the
/// first level is left out: it has settled, or is not known.
#[must_use]
pub fn superposition_time(levels: &[Level], change: &Change, dt: f64) -> f64 {
    let mut before = levels.first().map_or(0.0, |first| first.rate);
    let mut sum = dt.ln();
    for level in levels.iter().take(change.level).skip(1) {
        sum += (level.rate - before) / change.by * (change.at - level.from + dt).ln();
        before = level.rate;
    }
    sum
}

/// Derivative of `y` by `x` at the points that have others at least `apart` to either side: the mean of the slopes to
/// them, each weighted by the other's distance. `x` must ascend; in natural logarithms 0.1 to 0.5 is usual for `apart`.
///
/// Returns the order of each point that has one, and the derivative there.
#[must_use]
pub fn bourdet(points: &[(f64, f64)], apart: f64) -> Vec<(usize, f64)> {
    let mut found = Vec::new();
    let (mut left, mut right) = (0, 0);
    for (index, &(x, y)) in points.iter().enumerate() {
        // The nearest point that is far enough to the left, and to the right.
        while points.get(left + 1).is_some_and(|p| x - p.0 >= apart) {
            left += 1;
        }
        right = right.max(index + 1);
        while points.get(right).is_some_and(|p| p.0 - x < apart) {
            right += 1;
        }
        let (Some(&(xl, yl)), Some(&(xr, yr))) = (points.get(left), points.get(right)) else {
            continue;
        };
        let (to_left, to_right) = (x - xl, xr - x);
        if to_left < apart || to_left <= 0.0 || to_right <= 0.0 {
            continue;
        }
        let slopes = (y - yl) / to_left * to_right + (yr - y) / to_right * to_left;
        found.push((index, slopes / (to_left + to_right)));
    }
    found
}

#[cfg(test)]
mod tests {
    use std::f64::consts::PI;

    use super::*;
    use crate::closed_form::{line_source, superpose};

    const T: f64 = 3e-9;
    const S: f64 = 4e-9;

    #[test]
    fn the_derivative_of_a_line_source_is_an_exponential() {
        // d/d ln t of E1(u)/4 pi T is exp(-u)/4 pi T with u = r^2 S / 4 T t (Theis 1935).
        let r = 30.0;
        let points: Vec<(f64, f64)> = (0..400)
            .map(|k| {
                let t = 60.0 * (0.03 * f64::from(k)).exp();
                (t.ln(), line_source(r, T, S, t))
            })
            .collect();
        let found = bourdet(&points, 0.1);
        assert!(found.len() > 380);
        for (index, slope) in found {
            let t = points[index].0.exp();
            let exact = (-r * r * S / (4.0 * T * t)).exp() / (4.0 * PI * T);
            assert!(
                (slope - exact).abs() < 2e-3 / (4.0 * PI * T),
                "{t} s: {slope} {exact}"
            );
        }
    }

    #[test]
    fn superposition_time_straightens_what_flowed_before() {
        let path = [(0.0, 4e-3), (2e5, 1e-3), (5e5, 6e-3), (9e5, 0.0)];
        let pieces: Vec<(f64, f64)> = [(-1e6, 0.0)].into_iter().chain(path).collect();
        let levels = levels(&pieces, 1.3e6, 1e-5);
        let all = changes(&levels, 1.3e6, 1e-3, 1e5);
        assert_eq!(all.len(), 4);
        // At a tenth of a metre radial flow lacks exp(-u) - 1, which is 6e-6 after ten minutes.
        let change = all[3];
        let felt = |dt: f64| superpose(&path, change.at + dt, |t| line_source(0.1, T, S, t));
        let points: Vec<(f64, f64)> = (0..100)
            .map(|k| {
                let dt = 600.0 * (0.06 * f64::from(k)).exp();
                (superposition_time(&levels, &change, dt), felt(dt))
            })
            .collect();
        assert!(points.windows(2).all(|w| w[0].0 < w[1].0));
        let plateau = change.by / (4.0 * PI * T);
        for (index, slope) in bourdet(&points, 0.2) {
            assert!((slope / plateau - 1.0).abs() < 1e-5, "{index}: {slope}");
        }
        // By the plain logarithm of time it bends.
        let plain: Vec<(f64, f64)> = (0..100)
            .map(|k| {
                let x = 600_f64.ln() + 0.06 * f64::from(k);
                (x, felt(x.exp()))
            })
            .collect();
        let (_, last) = *bourdet(&plain, 0.2).last().unwrap();
        assert!((last / plateau - 1.0).abs() > 0.05);
    }

    #[test]
    fn a_wavering_rate_is_one_level_and_short_ones_are_no_change() {
        let mut pieces: Vec<(f64, f64)> = (0..50)
            .map(|k| (100.0 * f64::from(k), 1.0 + 0.01 * f64::from(k % 3 - 1)))
            .collect();
        pieces.extend([(5_000.0, 2.0), (5_100.0, 1.0), (9_000.0, 0.0)]);
        let found = levels(&pieces, 20_000.0, 0.05);
        assert_eq!(found.len(), 4);
        assert!((found[0].rate - 1.0).abs() < 0.01);
        let far = changes(&found, 20_000.0, 0.5, 1_000.0);
        let at: Vec<f64> = far.iter().map(|c| c.at).collect();
        assert_eq!(at, [5_100.0, 9_000.0]);
    }

    #[test]
    fn smoothing_trades_noise_for_detail_and_ends_have_none() {
        let points: Vec<(f64, f64)> = (0..200)
            .map(|k| {
                let x = 0.05 * f64::from(k);
                (x, 2.0 * x + 0.01 * f64::from(k % 2))
            })
            .collect();
        let spread = |apart: f64| {
            bourdet(&points, apart)
                .iter()
                .map(|(_, s)| (s - 2.0).abs())
                .fold(0.0, f64::max)
        };
        assert!(spread(0.5) < 0.5 * spread(0.05));
        let found = bourdet(&points, 0.5);
        assert!(found[0].0 >= 10 && found.last().unwrap().0 <= 189);
        assert!(bourdet(&points[..1], 0.1).is_empty() && bourdet(&[], 0.1).is_empty());
    }
}
