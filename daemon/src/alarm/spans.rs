//! A set of block numbers kept as ranges, so that a year of blocks costs two numbers.

use serde::{Deserialize, Serialize};

/// Block numbers as ascending, disjoint, not adjacent closed ranges.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(transparent)]
pub(super) struct Spans(Vec<(i64, i64)>);

impl Spans {
    pub(super) fn is_empty(&self) -> bool {
        self.0.is_empty()
    }

    pub(super) fn last(&self) -> Option<i64> {
        self.0.last().map(|r| r.1)
    }

    pub(super) fn contains(&self, block: i64) -> bool {
        self.0.iter().any(|r| r.0 <= block && block <= r.1)
    }

    pub(super) fn insert(&mut self, block: i64) {
        if self.contains(block) {
            return;
        }
        let mut merged = (block, block);
        self.0.retain(|r| {
            let touches = r.1.saturating_add(1) >= merged.0 && merged.1.saturating_add(1) >= r.0;
            if touches {
                merged = (merged.0.min(r.0), merged.1.max(r.1));
            }
            !touches
        });
        let at = self.0.partition_point(|r| r.0 < merged.0);
        self.0.insert(at, merged);
    }

    pub(super) fn remove(&mut self, block: i64) {
        let Some(at) = self.0.iter().position(|r| r.0 <= block && block <= r.1) else {
            return;
        };
        let range = self.0.remove(at);
        let left = (range.0, block.saturating_sub(1));
        let right = (block.saturating_add(1), range.1);
        for part in [right, left] {
            if part.0 <= part.1 {
                self.0.insert(at, part);
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use std::collections::BTreeSet;

    use proptest::prelude::*;

    use super::Spans;

    proptest! {
        #[test]
        fn behaves_as_a_set(acts in prop::collection::vec((any::<bool>(), 0_i64..20), 0..80)) {
            let mut spans = Spans::default();
            let mut set = BTreeSet::new();
            for (add, block) in acts {
                if add {
                    spans.insert(block);
                    set.insert(block);
                } else {
                    spans.remove(block);
                    set.remove(&block);
                }
                for b in -1..21 {
                    prop_assert_eq!(spans.contains(b), set.contains(&b));
                }
                prop_assert_eq!(spans.last(), set.last().copied());
                prop_assert_eq!(spans.is_empty(), set.is_empty());
                for pair in spans.0.windows(2) {
                    prop_assert!(pair[0].1 + 1 < pair[1].0, "ranges touch: {:?}", spans.0);
                }
            }
        }
    }
}
