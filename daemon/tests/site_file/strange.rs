//! No text is too strange.

use proptest::prelude::*;

use super::{FULL, read};

/// Words that stand where keys, headings and values stand.
fn piece() -> impl Strategy<Value = String> {
    prop_oneof![
        Just("[[gauge]]\n".to_owned()),
        Just("[[source.channel]]\n".to_owned()),
        Just("[site]\n".to_owned()),
        Just("site = 3\n".to_owned()),
        Just("gauge = [1, { name = 3 }]\n".to_owned()),
        Just("well = { at = [] }\n".to_owned()),
        Just("at = [\"1 m\", [\"2 m\"]]\n".to_owned()),
        Just("line = [[1], [], \"x\"]\n".to_owned()),
        Just("rate = { channel = {}, share = 1e400 }\n".to_owned()),
        Just("past = [{ from = 1979-05-27, rate = nan }]\n".to_owned()),
        Just("skin = 99999999999999999999\n".to_owned()),
        Just("id = \"{gauge\"\n".to_owned()),
        Just("topic = \"a/{b}/#\"\n".to_owned()),
        Just("porosity = 0xFFFFFFFFFFFFFFFFFF\n".to_owned()),
        Just("\"\\u0000\" = \"\\u0007\"\n".to_owned()),
        "[a-z_]{1,8} = \"[^\"\\\\\n]{0,12}\"\n",
        ".{0,20}\n",
    ]
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, ..ProptestConfig::with_cases(400) })]

    #[test]
    fn any_text_is_read_or_refused(text in ".{0,400}") {
        let _ = read(&text);
    }

    #[test]
    fn any_pieces_are_read_or_refused(pieces in prop::collection::vec(piece(), 0..30)) {
        if let Err(wrong) = read(&pieces.concat()) {
            let _ = wrong.to_string();
        }
    }

    #[test]
    fn a_site_with_a_piece_cut_or_put_in_is_read_or_refused(
        at in any::<prop::sample::Index>(),
        length in 0_usize..40,
        piece in piece(),
    ) {
        let chars: Vec<char> = FULL.chars().collect();
        let at = at.index(chars.len());
        let end = (at + length).min(chars.len());
        let text: String = chars[..at].iter().chain(&piece.chars().collect::<Vec<_>>()).chain(&chars[end..]).collect();
        if let Err(wrong) = read(&text) {
            let _ = wrong.to_string();
        }
    }
}
