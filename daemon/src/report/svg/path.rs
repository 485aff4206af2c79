//! Lines and bands as SVG paths.

use std::fmt::Write as _;

/// A point on the drawing \[user units\].
pub(super) type Dot = (f64, f64);

/// Cuts a series where it has nothing, or where `gap` says that two neighbours do not belong together.
pub(super) fn runs<T: Copy>(
    series: impl IntoIterator<Item = Option<T>>,
    gap: impl Fn(&T, &T) -> bool,
) -> Vec<Vec<T>> {
    let mut runs: Vec<Vec<T>> = vec![Vec::new()];
    for item in series {
        let last = runs.last().and_then(|run| run.last().copied());
        match (item, last) {
            (Some(item), Some(last)) if gap(&last, &item) => runs.push(vec![item]),
            (Some(item), _) => {
                if let Some(run) = runs.last_mut() {
                    run.push(item);
                }
            }
            (None, Some(_)) => runs.push(Vec::new()),
            (None, None) => {}
        }
    }
    runs.retain(|run| !run.is_empty());
    runs
}

/// Keeps the lowest and the highest dot of each column of one unit, so that a long record neither grows the file nor loses a spike.
pub(super) fn thin(dots: &[Dot]) -> Vec<Dot> {
    let mut kept: Vec<Dot> = Vec::new();
    let mut rest = dots;
    while let Some(first) = rest.first() {
        let column = first.0.floor();
        let end = rest
            .iter()
            .position(|d| d.0.floor() != column)
            .unwrap_or(rest.len());
        let (here, tail) = rest.split_at(end);
        if here.len() <= 2 {
            kept.extend(here);
        } else {
            let by_height = |a: &&Dot, b: &&Dot| a.1.total_cmp(&b.1);
            let low = here.iter().min_by(by_height);
            let high = here.iter().max_by(by_height);
            let mut both: Vec<Dot> = low.into_iter().chain(high).copied().collect();
            both.sort_by(|a, b| a.0.total_cmp(&b.0));
            kept.extend(both);
        }
        rest = tail;
    }
    kept
}

/// A line through dots; a lone dot becomes a point.
pub(super) fn line(dots: &[Dot]) -> String {
    let mut path = String::new();
    for (index, (x, y)) in dots.iter().enumerate() {
        let command = if index == 0 { 'M' } else { 'L' };
        // Writing to a String cannot fail.
        let _ = write!(path, "{command}{x:.1} {y:.1}");
    }
    if dots.len() == 1 {
        path += "h0.1";
    }
    path
}

/// The area between two lines over the same run, the lower one given in the same order.
pub(super) fn area(upper: &[Dot], lower: &[Dot]) -> String {
    let back: Vec<Dot> = upper.iter().chain(lower.iter().rev()).copied().collect();
    format!("{}Z", line(&back))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn series_are_cut_at_gaps() {
        let series = [Some(1.0), Some(2.0), None, None, Some(3.0), Some(9.0)];
        let runs = runs(series, |a, b| b - a > 2.0);
        assert_eq!(runs, [vec![1.0, 2.0], vec![3.0], vec![9.0]]);
    }

    #[test]
    fn thinning_keeps_spikes_and_order() {
        let mut dots: Vec<Dot> = (0..10_000).map(|n| (f64::from(n) / 1000.0, 0.0)).collect();
        dots[4321].1 = 7.0;
        let kept = thin(&dots);
        assert!(kept.len() <= 20);
        assert!(kept.contains(&(4.321, 7.0)));
        assert!(kept.windows(2).all(|w| w[0].0 <= w[1].0));
    }

    #[test]
    fn paths_are_short_text() {
        assert_eq!(line(&[(1.0, 2.0), (3.25, 4.0)]), "M1.0 2.0L3.2 4.0");
        assert_eq!(line(&[(1.0, 2.0)]), "M1.0 2.0h0.1");
        assert_eq!(
            area(&[(0.0, 1.0), (1.0, 1.0)], &[(0.0, 2.0), (1.0, 2.0)]),
            "M0.0 1.0L1.0 1.0L1.0 2.0L0.0 2.0Z"
        );
    }
}
