//! Instruments that do not answer are asked less often, so that they do not slow down the others of their line.

use tokio::time::Instant;

use super::backoff::Backoff;

/// Rounds without an answer after which an instrument is asked less often.
const PATIENCE: u32 = 3;

/// How long an instrument has been silent.
#[derive(Debug, Clone, Default)]
pub(crate) struct Absence {
    /// Rounds in a row without an answer.
    silent: u32,
    backoff: Backoff,
    held: Option<Instant>,
}

impl Absence {
    /// It answered.
    pub(crate) fn answered(&mut self) {
        *self = Self::default();
    }

    /// It did not answer in this round.
    pub(crate) fn missed(&mut self) {
        self.silent = self.silent.saturating_add(1);
        if self.silent >= PATIENCE {
            self.held = Some(Instant::now() + self.backoff.wait());
        }
    }

    /// Whether it is left alone for now.
    pub(crate) fn is_held(&self) -> bool {
        self.held.is_some_and(|until| until > Instant::now())
    }
}

#[cfg(test)]
mod tests {
    use super::Absence;

    #[test]
    fn only_the_third_miss_in_a_row_holds_and_an_answer_lets_go() {
        let mut absence = Absence::default();
        absence.missed();
        absence.missed();
        absence.answered();
        absence.missed();
        absence.missed();
        assert!(!absence.is_held());
        absence.missed();
        assert!(absence.is_held());
        absence.answered();
        assert!(!absence.is_held());
    }
}
