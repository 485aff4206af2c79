//! The nearest spelling, for messages.

/// The candidate nearest to `word`, where one is near enough to be what was meant; the first of equals.
///
/// Nearness is the optimal string alignment distance (insertions, deletions, substitutions, swaps of neighbours),
/// a wrong case counting half. Near enough is up to a third of the word's length, and always one slip.
#[must_use]
pub fn nearest<'a>(word: &str, candidates: impl IntoIterator<Item = &'a str>) -> Option<&'a str> {
    let word: Vec<char> = word.chars().take(LONGEST).collect();
    // In half slips.
    let limit = (2 * word.len() / 3).max(2);
    let mut best: Option<(usize, &str)> = None;
    for candidate in candidates {
        let spelled: Vec<char> = candidate.chars().take(LONGEST).collect();
        // A one-letter name is near to every other one: only its case may be wrong.
        let limit = if word.len().min(spelled.len()) < 2 {
            1
        } else {
            limit
        };
        let distance = distance(&word, &spelled);
        if distance <= limit && best.is_none_or(|(d, _)| distance < d) {
            best = Some((distance, candidate));
        }
    }
    best.map(|(_, candidate)| candidate)
}

/// Longer words are compared by their beginnings.
const LONGEST: usize = 64;

/// Optimal string alignment distance in half slips.
fn distance(a: &[char], b: &[char]) -> usize {
    let at = |row: &[usize], j: usize| row.get(j).copied().unwrap_or(usize::MAX / 2);
    let mut before: Vec<usize> = Vec::new();
    let mut last: Vec<usize> = (0..=b.len()).map(|j| 2 * j).collect();
    let mut previous_a = None;
    for (i, &x) in a.iter().enumerate() {
        let mut row = vec![2 * (i + 1)];
        let mut previous_b = None;
        for (j, &y) in b.iter().enumerate() {
            let change = if x == y {
                0
            } else if x.eq_ignore_ascii_case(&y) {
                1
            } else {
                2
            };
            let mut cost = (at(&last, j) + change)
                .min(at(&last, j + 1) + 2)
                .min(at(&row, j) + 2);
            if j > 0 && previous_a == Some(y) && previous_b == Some(x) {
                cost = cost.min(at(&before, j - 1) + 2);
            }
            row.push(cost);
            previous_b = Some(y);
        }
        before = std::mem::replace(&mut last, row);
        previous_a = Some(x);
    }
    at(&last, b.len())
}

#[cfg(test)]
mod tests {
    use super::nearest;

    #[test]
    fn finds_slips_and_not_strangers() {
        let keys = ["permeability", "thickness", "porosity", "name", "at"];
        assert_eq!(nearest("permeabilty", keys), Some("permeability"));
        assert_eq!(nearest("prot", ["port", "baud"]), Some("port"));
        assert_eq!(nearest("Name", keys), Some("name"));
        assert_eq!(nearest("colour", keys), None);
        assert_eq!(nearest("", keys), None);
        assert_eq!(nearest("MPA", ["mPa s", "MPa"]), Some("MPa"));
        assert_eq!(nearest("x", ["y", "z"]), None);
    }
}
