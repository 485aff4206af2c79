//! Collects what is wrong while the whole file is walked.

use std::cell::RefCell;
use std::ops::Range;

use super::{Mistake, Note};

/// Longest value quoted in a mistake \[characters\].
const LONGEST_VALUE: usize = 60;

/// What has been found wrong so far. Readers share it, so it is filled through a shared reference.
pub(super) struct Report<'s> {
    text: &'s str,
    found: RefCell<Vec<Found>>,
    notes: RefCell<Vec<Note>>,
}

/// A mistake, and whether a broken line elsewhere may be its only cause.
struct Found {
    mistake: Mistake,
    follows: bool,
}

impl<'s> Report<'s> {
    pub(super) fn new(text: &'s str) -> Self {
        Self {
            text,
            found: RefCell::default(),
            notes: RefCell::default(),
        }
    }

    /// A wrong value at `span`, quoted.
    pub(super) fn value(
        &self,
        span: &Range<usize>,
        key: String,
        what: impl Into<String>,
        mend: impl Into<String>,
    ) {
        let value = self.quoted(span);
        self.push(span, key, value, what.into(), mend.into(), false);
    }

    /// Something wrong at `span` that is no value: a key, a heading.
    pub(super) fn place(
        &self,
        span: &Range<usize>,
        key: String,
        what: impl Into<String>,
        mend: impl Into<String>,
    ) {
        self.push(span, key, String::new(), what.into(), mend.into(), false);
    }

    /// Something missing, or a reference to what is not there: not said while a line of the file cannot be read.
    pub(super) fn missing(
        &self,
        span: &Range<usize>,
        key: String,
        what: impl Into<String>,
        mend: impl Into<String>,
    ) {
        self.push(span, key, String::new(), what.into(), mend.into(), true);
    }

    /// A reference to what is not there, quoted: not said while a line of the file cannot be read.
    pub(super) fn dangling(
        &self,
        span: &Range<usize>,
        key: String,
        what: impl Into<String>,
        mend: impl Into<String>,
    ) {
        let value = self.quoted(span);
        self.push(span, key, value, what.into(), mend.into(), true);
    }

    /// Something to know that stops nothing.
    pub(super) fn note(&self, span: &Range<usize>, key: String, text: impl Into<String>) {
        let (line, column) = self.position(span.start);
        self.notes.borrow_mut().push(Note {
            line,
            column,
            key,
            text: text.into(),
        });
    }

    fn push(
        &self,
        span: &Range<usize>,
        key: String,
        value: String,
        what: String,
        mend: String,
        follows: bool,
    ) {
        let (line, column) = self.position(span.start);
        let mistake = Mistake {
            line,
            column,
            key,
            value,
            what,
            mend,
        };
        self.found.borrow_mut().push(Found { mistake, follows });
    }

    /// Line and column, from 1, of a byte of the text.
    fn position(&self, byte: usize) -> (usize, usize) {
        let mut end = byte.min(self.text.len());
        while !self.text.is_char_boundary(end) {
            end = end.saturating_sub(1);
        }
        let before = self.text.get(..end).unwrap_or_default();
        let line_start = before.rfind('\n').map_or(0, |n| n + 1);
        let line = before.matches('\n').count() + 1;
        let column = before.get(line_start..).unwrap_or_default().chars().count() + 1;
        (line, column)
    }

    /// The text at a span on one line, cut.
    fn quoted(&self, span: &Range<usize>) -> String {
        let raw = self.text.get(span.clone()).unwrap_or_default();
        let line = raw.split_whitespace().collect::<Vec<_>>().join(" ");
        if line.chars().count() <= LONGEST_VALUE {
            return line;
        }
        let cut: String = line.chars().take(LONGEST_VALUE - 1).collect();
        format!("{cut}…")
    }

    /// The whole line that holds a byte.
    pub(super) fn line_at(&self, byte: usize) -> &'s str {
        let (line, _) = self.position(byte);
        self.text.lines().nth(line.saturating_sub(1)).unwrap_or("")
    }

    /// All mistakes and notes in file order. `broken` holds lines the TOML reader could not take: what else is said
    /// of them is dropped, and so is what may only follow from them.
    pub(super) fn finish(self, broken: Vec<Mistake>) -> (Vec<Mistake>, Vec<Note>) {
        let mut mistakes: Vec<Mistake> = self
            .found
            .into_inner()
            .into_iter()
            .filter(|f| {
                broken.is_empty() || !(f.follows || broken.iter().any(|b| b.line == f.mistake.line))
            })
            .map(|f| f.mistake)
            .collect();
        mistakes.extend(broken);
        mistakes.sort_by_key(|m| (m.line, m.column));
        let mut notes = self.notes.into_inner();
        notes.sort_by_key(|n| (n.line, n.column));
        (mistakes, notes)
    }

    /// Mistakes of the TOML reader itself.
    pub(super) fn syntax(&self, errors: &[toml::de::Error]) -> Vec<Mistake> {
        let mut broken: Vec<Mistake> = Vec::new();
        for error in errors {
            let start = error.span().map_or(self.text.len(), |s| s.start);
            let (line, column) = self.position(start);
            // One slip often makes the reader stumble several times on its line.
            if broken.iter().any(|b| b.line == line) {
                continue;
            }
            let source = self.line_at(start).trim();
            let message = error.message().replace('\n', ", ");
            let usual = "mend the line; text goes in double quotes, lists in [ ], tables in { }";
            let mend = if message.contains("duplicate key") {
                "keep one of the two; what comes several times has a heading like [[gauge]]"
                    .to_owned()
            } else {
                unquoted(source)
                    .filter(|_| message.contains("quoted"))
                    .unwrap_or_else(|| usual.to_owned())
            };
            broken.push(Mistake {
                line,
                column,
                key: "file".to_owned(),
                value: String::new(),
                what: format!("this is not TOML: {message}"),
                mend,
            });
        }
        broken
    }
}

/// The mend for a value that only lacks its quotes, the commonest slip.
fn unquoted(line: &str) -> Option<String> {
    let (key, value) = line.split_once('=')?;
    let (key, value) = (key.trim(), value.split('#').next()?.trim());
    let plain = |c: char| c.is_ascii_alphanumeric() || c == '_' || c == '-';
    let quote = |c: char| matches!(c, '"' | '\'' | '[' | '{' | '(');
    (!key.is_empty() && key.chars().all(plain) && !value.is_empty() && !value.contains(quote))
        .then(|| format!("put the value in quotes: {key} = \"{value}\""))
}
