//! What every alarm says of itself.

/// Goes with every alarm, report and page: what the program is, and what it is not.
pub const NOTICE: &str = "Advisory only. borewake watches and advises; it is not a safety function, shuts nothing down \
and replaces no leak detection, well control or emergency plan. It can alarm without cause and miss what is there, and \
silence proves nothing: supervise its heartbeat from outside. Check by independent means before acting, and act at once \
where danger is plain. Local codes, the permit, the emergency plan and licensed practice decide.";

#[cfg(test)]
mod tests {
    use super::NOTICE;

    #[test]
    fn notice_says_what_it_must() {
        for word in [
            "Advisory",
            "not a safety function",
            "silence",
            "independent",
            "codes",
            "permit",
            "emergency plan",
            "licensed",
        ] {
            assert!(NOTICE.contains(word), "{word}");
        }
    }
}
