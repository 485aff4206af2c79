//! Cuts a stream of bytes into lines. Pure.

/// A line, without its end.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Line {
    /// Whole.
    Whole(Vec<u8>),
    /// Longer than allowed: its beginning.
    TooLong(Vec<u8>),
}

/// Collects bytes and gives lines. A line ends with CR, LF or both; empty lines are left out. It never holds more than the
/// longest line and what was pushed last.
#[derive(Debug, Clone)]
pub struct Framer {
    most: usize,
    buffer: Vec<u8>,
    /// Bytes of the buffer that hold no line end.
    searched: usize,
    /// Drop everything up to the next line end.
    skipping: bool,
}

impl Framer {
    /// Lines of up to `most` bytes.
    #[must_use]
    pub fn new(most: usize) -> Self {
        Self {
            most: most.max(1),
            buffer: Vec::new(),
            searched: 0,
            skipping: false,
        }
    }

    /// The line now begun was not seen from its beginning, and is dropped.
    pub fn skip_rest_of_line(&mut self) {
        self.skipping = true;
    }

    /// Takes bytes as they come; call [`Framer::next`] until it gives nothing before the next.
    pub fn push(&mut self, bytes: &[u8]) {
        self.buffer.extend_from_slice(bytes);
    }

    /// The next line; `None` until more bytes come.
    #[expect(
        clippy::should_implement_trait,
        reason = "more may come after None, which an iterator would not say"
    )]
    pub fn next(&mut self) -> Option<Line> {
        loop {
            let new = self.buffer.get(self.searched..).unwrap_or_default();
            let Some(found) = new.iter().position(|b| matches!(b, b'\r' | b'\n')) else {
                self.searched = self.buffer.len();
                return self.overlong();
            };
            let end = self.searched + found;
            let mut line: Vec<u8> = self.buffer.drain(..=end).collect();
            line.truncate(end);
            self.searched = 0;
            if std::mem::take(&mut self.skipping) || line.is_empty() {
                continue;
            }
            if line.len() > self.most {
                line.truncate(self.most);
                return Some(Line::TooLong(line));
            }
            return Some(Line::Whole(line));
        }
    }

    /// Gives up a line that is too long before its end has come.
    fn overlong(&mut self) -> Option<Line> {
        if self.skipping {
            self.buffer.clear();
            self.searched = 0;
            return None;
        }
        if self.buffer.len() <= self.most {
            return None;
        }
        self.skipping = true;
        self.searched = 0;
        let mut beginning = std::mem::take(&mut self.buffer);
        beginning.truncate(self.most);
        Some(Line::TooLong(beginning))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn lines(framer: &mut Framer, bytes: &[u8]) -> Vec<Line> {
        framer.push(bytes);
        std::iter::from_fn(|| framer.next()).collect()
    }

    fn whole(text: &str) -> Line {
        Line::Whole(text.into())
    }

    #[test]
    fn lines_end_with_either_or_both() {
        let mut framer = Framer::new(80);
        let found = lines(&mut framer, b"a\r\nb\rc\n\n\nd");
        assert_eq!(found, [whole("a"), whole("b"), whole("c")]);
        assert_eq!(lines(&mut framer, b"e\n"), [whole("de")]);
    }

    #[test]
    fn a_line_not_seen_from_its_beginning_is_dropped() {
        let mut framer = Framer::new(80);
        framer.skip_rest_of_line();
        assert_eq!(lines(&mut framer, b"3.4"), []);
        assert_eq!(lines(&mut framer, b"5\r\n12.5\r\n"), [whole("12.5")]);
    }

    #[test]
    fn a_line_without_end_is_given_up_once() {
        let mut framer = Framer::new(4);
        assert_eq!(lines(&mut framer, b"1234"), []);
        assert_eq!(
            lines(&mut framer, b"5678"),
            [Line::TooLong(b"1234".to_vec())]
        );
        assert_eq!(lines(&mut framer, &[b'9'; 1000]), []);
        assert_eq!(lines(&mut framer, b"\nok\n"), [whole("ok")]);
    }

    proptest! {
        /// However the bytes are cut into pieces, the lines are the same, and short.
        #[test]
        fn pieces_do_not_matter(
            bytes in prop::collection::vec(prop::sample::select(b"01.,\r\nx\xff".to_vec()), 0..200),
            cuts in prop::collection::vec(1_usize..20, 1..50),
            most in 1_usize..12,
        ) {
            let mut at_once = Framer::new(most);
            let expected = lines(&mut at_once, &bytes);
            let mut framer = Framer::new(most);
            let mut found = Vec::new();
            let mut rest = &bytes[..];
            for cut in cuts.iter().cycle() {
                if rest.is_empty() {
                    break;
                }
                let (piece, tail) = rest.split_at((*cut).min(rest.len()));
                found.extend(lines(&mut framer, piece));
                prop_assert!(framer.buffer.len() <= most);
                rest = tail;
            }
            prop_assert_eq!(&found, &expected);
            for line in found {
                let (Line::Whole(l) | Line::TooLong(l)) = line;
                prop_assert!(!l.is_empty() && l.len() <= most);
            }
        }
    }
}
