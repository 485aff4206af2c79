//! A table of the site file, read key by key; what was not asked for is reported when it is closed.

use std::ops::Range;

use borewake_model::units::nearest;
use toml::Spanned;
use toml::de::{DeTable, DeValue};

use super::report::Report;

/// Most names listed in a mend.
const MOST_LISTED: usize = 12;

/// A value with its place in the text.
#[derive(Debug, Clone)]
pub(super) struct At<T> {
    pub(super) value: T,
    pub(super) span: Range<usize>,
}

/// A table and the keys asked of it so far.
pub(super) struct Section<'s> {
    pub(super) report: &'s Report<'s>,
    table: &'s DeTable<'s>,
    /// Where mistakes about the table as a whole are shown.
    pub(super) span: Range<usize>,
    path: String,
    known: Vec<&'static str>,
    /// Keys that must be there and are not, with their mend; told when the table is closed.
    missing: Vec<(&'static str, String)>,
    /// Keys are dotted on the path (an inline table) instead of following a colon.
    dotted: bool,
}

impl<'s> Section<'s> {
    /// The whole file.
    pub(super) fn root(report: &'s Report<'s>, table: &'s DeTable<'s>) -> Self {
        Self {
            report,
            table,
            span: 0..0,
            path: String::new(),
            known: Vec::new(),
            missing: Vec::new(),
            dotted: false,
        }
    }

    /// The key in the file's own terms: `gauge "O-2": noise`.
    pub(super) fn key(&self, key: &str) -> String {
        match (self.path.is_empty(), self.dotted) {
            (true, _) => key.to_owned(),
            (false, true) => format!("{}.{key}", self.path),
            (false, false) => format!("{}: {key}", self.path),
        }
    }

    /// The table in the file's own terms: `gauge "O-2"`.
    pub(super) fn path(&self) -> &str {
        &self.path
    }

    /// The value of a key, which becomes a known one.
    pub(super) fn take(&mut self, key: &'static str) -> Option<&'s Spanned<DeValue<'s>>> {
        if !self.known.contains(&key) {
            self.known.push(key);
        }
        self.table.get(key)
    }

    /// Whether the key is there, wrong or not.
    pub(super) fn has(&self, key: &str) -> bool {
        self.table.contains_key(key)
    }

    /// Where the key stands; the table's place if it is not there.
    pub(super) fn key_span(&self, key: &str) -> Range<usize> {
        self.table
            .get_key_value(key)
            .map_or_else(|| self.span.clone(), |(k, _)| k.span())
    }

    /// Where the key's value stands; the table's place if it is not there.
    pub(super) fn value_span(&self, key: &str) -> Range<usize> {
        self.table
            .get(key)
            .map_or_else(|| self.span.clone(), Spanned::span)
    }

    /// Reads a key that must be there.
    pub(super) fn must<T>(
        &mut self,
        key: &'static str,
        mend: &str,
        read: impl FnOnce(&mut Self, &'static str) -> Option<T>,
    ) -> Option<T> {
        if self.has(key) {
            return read(self, key);
        }
        self.take(key);
        self.missing.push((key, format!("add {mend}")));
        None
    }

    /// The table for messages about it as a whole.
    pub(super) fn whole(&self) -> String {
        if self.path.is_empty() {
            "file".to_owned()
        } else {
            self.path.clone()
        }
    }

    /// Reports a value of another type.
    pub(super) fn due(&self, key: &str, found: &Spanned<DeValue<'_>>, due: &str, mend: &str) {
        let what = format!("{due} is due, and this is {}", type_name(found.get_ref()));
        self.report.value(&found.span(), self.key(key), what, mend);
    }

    /// Reports a key's value as wrong.
    pub(super) fn wrong<T>(
        &self,
        key: &str,
        at: &At<T>,
        what: impl Into<String>,
        mend: impl Into<String>,
    ) {
        self.report.value(&at.span, self.key(key), what, mend);
    }

    /// Text that is not empty.
    pub(super) fn text(&mut self, key: &'static str) -> Option<At<String>> {
        let found = self.take(key)?;
        let Some(text) = found.get_ref().as_str() else {
            self.due(key, found, "text", "write it in double quotes");
            return None;
        };
        let at = At {
            value: text.to_owned(),
            span: found.span(),
        };
        if text.trim().is_empty() {
            self.wrong(
                key,
                &at,
                "it is empty",
                "write something, or leave the key out",
            );
            return None;
        }
        if text.chars().any(char::is_control) {
            self.wrong(key, &at, "it holds a control character", "leave it out");
            return None;
        }
        Some(at)
    }

    /// A list of texts that are not empty.
    pub(super) fn texts(&mut self, key: &'static str) -> Option<Vec<At<String>>> {
        let found = self.take(key)?;
        let Some(items) = found.get_ref().as_array() else {
            self.due(key, found, "a list of texts", "write it in square brackets");
            return None;
        };
        let mut texts = Vec::new();
        for item in items.iter() {
            match item.get_ref().as_str().filter(|t| !t.trim().is_empty()) {
                Some(text) => texts.push(At {
                    value: text.to_owned(),
                    span: item.span(),
                }),
                None => self.due(key, item, "text", "write it in double quotes"),
            }
        }
        Some(texts)
    }

    /// One of a list of words.
    pub(super) fn word<T: Copy>(
        &mut self,
        key: &'static str,
        words: &[(&'static str, T)],
    ) -> Option<T> {
        let at = self.text(key)?;
        let found = words.iter().find(|(word, _)| *word == at.value);
        if found.is_none() {
            let names: Vec<&str> = words.iter().map(|(word, _)| *word).collect();
            self.unknown_word(key, &at, &names);
        }
        found.map(|(_, value)| *value)
    }

    /// Reports a word that is not among those taken, with the nearest of them.
    fn unknown_word(&self, key: &str, at: &At<String>, words: &[&str]) {
        let near = nearest(&at.value, words.iter().copied())
            .map(|n| format!("did you mean \"{n}\"? "))
            .unwrap_or_default();
        let listed: Vec<String> = words.iter().map(|n| format!("\"{n}\"")).collect();
        let mend = format!("{near}it takes {}", listed.join(", "));
        let what = format!("\"{}\" is not one of the words it takes", at.value);
        self.wrong(key, at, what, mend);
    }

    /// Reports a name that is not among those known, with the nearest of them.
    pub(super) fn unknown_name(&self, key: &str, at: &At<String>, what: &str, names: &[&str]) {
        let near = nearest(&at.value, names.iter().copied())
            .map(|n| format!("did you mean \"{n}\"? "))
            .unwrap_or_default();
        let mut listed: Vec<String> = names.iter().map(|n| format!("\"{n}\"")).collect();
        listed.dedup();
        let listed = listed.into_iter().take(MOST_LISTED).collect::<Vec<_>>();
        let listed = listed.join(", ");
        let mend = if listed.is_empty() {
            "there is none yet".to_owned()
        } else {
            format!("{near}there is {listed}")
        };
        self.report.dangling(
            &at.span,
            self.key(key),
            format!("\"{}\" {what}", at.value),
            mend,
        );
    }

    /// A table under a key.
    pub(super) fn table(&mut self, key: &'static str) -> Option<Section<'s>> {
        let found = self.take(key)?;
        let Some(table) = found.get_ref().as_table() else {
            let mend = if self.path.is_empty() {
                format!("write it once, under the heading [{key}]")
            } else {
                format!("write {key} = {{ … }}")
            };
            self.due(key, found, "one table", &mend);
            return None;
        };
        Some(Section {
            report: self.report,
            table,
            span: found.span(),
            path: self.key(key),
            known: Vec::new(),
            missing: Vec::new(),
            dotted: !self.path.is_empty(),
        })
    }

    /// Whether the key holds a table.
    pub(super) fn is_table(&self, key: &str) -> bool {
        self.table.get(key).is_some_and(|v| v.get_ref().is_table())
    }

    /// Whether the key holds a list.
    pub(super) fn is_list(&self, key: &str) -> bool {
        self.table.get(key).is_some_and(|v| v.get_ref().is_array())
    }

    /// The tables of a list, named after their `name` or `id`, else numbered.
    pub(super) fn list(&mut self, key: &'static str) -> Vec<Section<'s>> {
        let Some(found) = self.take(key) else {
            return Vec::new();
        };
        let Some(items) = found.get_ref().as_array() else {
            let heading = self.heading(key);
            let mend = format!("write the heading as [[{heading}]], once for each");
            self.due(key, found, "a list of tables", &mend);
            return Vec::new();
        };
        let mut sections = Vec::new();
        for (index, item) in items.iter().enumerate() {
            let Some(table) = item.get_ref().as_table() else {
                self.due(key, item, "a table", "write { … }");
                continue;
            };
            let named = ["name", "id"]
                .iter()
                .find_map(|k| table.get(*k)?.get_ref().as_str());
            let label = match named {
                Some(name) => format!("{key} \"{name}\""),
                None => format!("{key} {}", index + 1),
            };
            let path = if self.path.is_empty() {
                label
            } else {
                format!("{}, {label}", self.path)
            };
            sections.push(Section {
                report: self.report,
                table,
                span: item.span(),
                path,
                known: Vec::new(),
                missing: Vec::new(),
                dotted: false,
            });
        }
        sections
    }

    /// The heading of a list below this table.
    fn heading(&self, key: &str) -> String {
        match self.path.split([' ', ',']).next() {
            Some(parent) if !parent.is_empty() => format!("{parent}.{key}"),
            _ => key.to_owned(),
        }
    }

    /// Accepts a key that is not acted on, and says so.
    pub(super) fn noted(&mut self, key: &'static str, text: &str) {
        if self.take(key).is_some() {
            self.report.note(&self.key_span(key), self.key(key), text);
        }
    }

    /// Refuses a key that this build does not act on and must not pass over.
    pub(super) fn refused(&mut self, key: &'static str, what: &str, mend: &str) {
        if self.take(key).is_some() {
            self.report
                .place(&self.key_span(key), self.key(key), what, mend);
        }
    }

    /// Reports every key that must be there and is not, and every key that nobody asked for.
    pub(super) fn close(mut self) {
        for (key, _) in self.table.iter() {
            let name = key.get_ref();
            if self.known.iter().any(|known| known == name) {
                continue;
            }
            let mend = match nearest(name, self.known.iter().copied()) {
                Some(near) => {
                    // A slip of the pen is one mistake, not a missing key and an unknown one.
                    self.missing.retain(|(missing, _)| *missing != near);
                    format!("did you mean `{near}`?")
                }
                None => {
                    let mut known = self.known.clone();
                    known.sort_unstable();
                    format!("leave it out; known here: {}", known.join(", "))
                }
            };
            self.report
                .place(&key.span(), self.key(name), "unknown key", mend);
        }
        self.close_partly();
    }

    /// Reports every key that must be there and is not; what else the table holds is not looked at.
    pub(super) fn close_partly(self) {
        for (key, mend) in &self.missing {
            let what = format!("`{key}` is missing");
            self.report
                .missing(&self.span, self.whole(), what, mend.clone());
        }
    }
}

/// What a value is, for messages.
pub(super) fn type_name(value: &DeValue<'_>) -> &'static str {
    match value {
        DeValue::String(_) => "text",
        DeValue::Integer(_) | DeValue::Float(_) => "a number",
        DeValue::Boolean(_) => "true or false",
        DeValue::Datetime(_) => "a date",
        DeValue::Array(_) => "a list",
        DeValue::Table(_) => "a table",
    }
}
