//! Topics and channel names with placeholders.

use std::fmt;
use std::sync::Arc;

use thiserror::Error;

/// Text with `{placeholders}`: a topic, or the name of a channel. Each placeholder stands for one level of a topic, and is not empty.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct TopicPattern {
    text: Arc<str>,
    parts: Arc<[PatternPart]>,
}

/// A piece of a [`TopicPattern`].
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash)]
enum PatternPart {
    /// These characters.
    Literal(String),
    /// Whatever stands here, without `/`, under this name.
    Placeholder(String),
}

/// A pattern that cannot be read.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub enum PatternError {
    /// A brace without its partner, or a placeholder without a proper name.
    #[error("a placeholder is a name of letters, digits and _ in braces, such as {{gauge}}")]
    Brace,
    /// The same placeholder twice.
    #[error("the placeholder {{{0}}} stands twice")]
    Twice(String),
    /// Two placeholders with nothing between.
    #[error("between two placeholders there must be some text")]
    Touching,
}

impl TopicPattern {
    /// Reads a pattern.
    ///
    /// # Errors
    /// Braces that do not pair, a placeholder without a proper name, twice, or right after another.
    pub fn parse(text: &str) -> Result<Self, PatternError> {
        let mut parts = Vec::new();
        let mut rest = text;
        while let Some((before, after)) = rest.split_once('{') {
            let (name, tail) = after.split_once('}').ok_or(PatternError::Brace)?;
            let proper = |c: char| c.is_ascii_alphanumeric() || c == '_';
            if before.contains('}') || name.is_empty() || !name.chars().all(proper) {
                return Err(PatternError::Brace);
            }
            let twice = |p: &PatternPart| matches!(p, PatternPart::Placeholder(n) if n == name);
            if parts.iter().any(twice) {
                return Err(PatternError::Twice(name.to_owned()));
            }
            if !before.is_empty() {
                parts.push(PatternPart::Literal(before.to_owned()));
            } else if matches!(parts.last(), Some(PatternPart::Placeholder(_))) {
                return Err(PatternError::Touching);
            }
            parts.push(PatternPart::Placeholder(name.to_owned()));
            rest = tail;
        }
        if rest.contains('}') {
            return Err(PatternError::Brace);
        }
        if !rest.is_empty() {
            parts.push(PatternPart::Literal(rest.to_owned()));
        }
        Ok(Self {
            text: text.into(),
            parts: parts.into(),
        })
    }

    /// A text without placeholders, whatever it holds.
    #[must_use]
    pub fn plain(text: &str) -> Self {
        Self {
            text: text.into(),
            parts: [PatternPart::Literal(text.to_owned())].into(),
        }
    }

    /// The pattern as written.
    #[must_use]
    pub fn as_str(&self) -> &str {
        &self.text
    }

    /// Names of the placeholders, in order.
    pub fn placeholders(&self) -> impl Iterator<Item = &str> {
        self.parts.iter().filter_map(|p| match p {
            PatternPart::Placeholder(name) => Some(name.as_str()),
            PatternPart::Literal(_) => None,
        })
    }

    /// Whether it has no placeholder.
    #[must_use]
    pub fn is_plain(&self) -> bool {
        self.placeholders().next().is_none()
    }

    /// What the placeholders stand for in `text`, where it fits. Each takes the shortest run that lets the rest fit.
    #[must_use]
    pub fn capture(&self, text: &str) -> Option<Vec<(&str, String)>> {
        let mut found = Vec::new();
        capture(&self.parts, text, &mut found).then_some(found)
    }

    /// Whether `text` fits.
    #[must_use]
    pub fn fits(&self, text: &str) -> bool {
        self.capture(text).is_some()
    }

    /// The text with every placeholder filled in; `None` where one of them is not among `values`.
    #[must_use]
    pub fn fill(&self, values: &[(&str, String)]) -> Option<String> {
        self.parts
            .iter()
            .map(|part| match part {
                PatternPart::Literal(text) => Some(text.as_str()),
                PatternPart::Placeholder(name) => values
                    .iter()
                    .find(|(n, _)| n == name)
                    .map(|(_, v)| v.as_str()),
            })
            .collect()
    }

    /// The topic filter to subscribe to: every level that has a placeholder becomes `+`.
    #[must_use]
    pub fn filter(&self) -> String {
        let levels: Vec<&str> = self
            .text
            .split('/')
            .map(|level| if level.contains('{') { "+" } else { level })
            .collect();
        levels.join("/")
    }
}

/// Fits `text` to `parts` from the left, going back where a shorter run does not let the rest fit.
fn capture<'p>(parts: &'p [PatternPart], text: &str, found: &mut Vec<(&'p str, String)>) -> bool {
    match parts.split_first() {
        None => text.is_empty(),
        Some((PatternPart::Literal(literal), rest)) => text
            .strip_prefix(literal.as_str())
            .is_some_and(|tail| capture(rest, tail, found)),
        Some((PatternPart::Placeholder(name), rest)) => {
            let level = text.split('/').next().unwrap_or_default();
            for (end, c) in level.char_indices() {
                let (run, tail) = text.split_at(end + c.len_utf8());
                found.push((name, run.to_owned()));
                if capture(rest, tail, found) {
                    return true;
                }
                found.pop();
            }
            false
        }
    }
}

impl fmt::Display for TopicPattern {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.text)
    }
}
