//! Recorder and rounds against sensors on the far end of a pty.

use super::codec::checksum;
use super::*;
use crate::config::Conversion;
use crate::intake::Conversions;
use crate::intake::clock::SetClock;
use crate::record::{Quality, Stamp};
use proptest::prelude::*;
use std::sync::Arc;
use tokio::io::{AsyncReadExt as _, AsyncWriteExt as _};
use tokio_serial::SerialStream;

/// What a sensor does with a command.
#[derive(Debug, Clone, Copy)]
enum Deed {
    /// Answers after a share of the timeout.
    Answer(f64),
    /// Answers so, with a character damaged.
    Damage(f64),
    /// Answers so, twice.
    Repeat(f64),
    /// Has no values to give.
    Abort,
    /// Does nothing.
    Ignore,
}

/// What value `position` of measurement `index` of a sensor is: no two are alike.
fn held(address: char, index: u8, position: usize) -> f64 {
    f64::from(u32::from(address)) * 100.0 + f64::from(index) * 10.0 + position as f64 + 0.25
}

/// Sensors of five values a measurement, three an answer at most, that answer in order.
async fn serve(mut port: SerialStream, timeout: Duration, echo: bool, deeds: Vec<Deed>) {
    let mut deeds = deeds.into_iter().cycle();
    let mut last: BTreeMap<char, (u8, bool)> = BTreeMap::new();
    let mut heard = String::new();
    loop {
        let Ok(byte) = port.read_u8().await else {
            return;
        };
        if byte != b'!' {
            heard.push(char::from(byte));
            continue;
        }
        let command = std::mem::take(&mut heard);
        if echo {
            let _ = port.write_all(format!("{command}!").as_bytes()).await;
        }
        let mut letters = command.chars();
        let Some(address) = letters.next() else {
            continue;
        };
        let body = letters.as_str();
        let deed = deeds.next().unwrap();
        let part = |from: usize, index: u8, checked: bool| {
            let values =
                (from..5.min(from + 3)).map(|p| format!("{:+}", held(address, index, p + 1)));
            let text = format!("{address}{}", values.collect::<String>());
            let check = if checked {
                checksum(&text)
            } else {
                String::new()
            };
            text + &check
        };
        let mut ready = false;
        let mut answer = match body.as_bytes() {
            [] => address.to_string(),
            [b'I'] => format!("{address}14INVENTEDMODEL01"),
            [b'D', digit] => {
                let (index, checked) = last.get(&address).copied().unwrap_or_default();
                let from = 3 * usize::from(digit - b'0');
                if matches!(deed, Deed::Abort) {
                    address.to_string()
                        + &if checked {
                            checksum(&address.to_string())
                        } else {
                            String::new()
                        }
                } else {
                    part(from, index, checked)
                }
            }
            [b'R', rest @ ..] => {
                let index = rest.last().map_or(0, |d| d - b'0');
                let checked = rest.first() == Some(&b'C');
                let values = (0..5).map(|p| format!("{:+}", held(address, index, p + 1)));
                let text = format!("{address}{}", values.collect::<String>());
                let check = if checked {
                    checksum(&text)
                } else {
                    String::new()
                };
                text + &check
            }
            [kind, rest @ ..] => {
                let checked = rest.first() == Some(&b'C');
                let index = rest
                    .last()
                    .filter(|d| d.is_ascii_digit())
                    .map_or(0, |d| d - b'0');
                last.insert(address, (index, checked));
                ready = *kind == b'M' && index == 1;
                match (*kind, index) {
                    (b'M', 1) => format!("{address}0015"),
                    (b'M', _) => format!("{address}0005"),
                    _ => format!("{address}00005"),
                }
            }
        };
        let share = match deed {
            Deed::Answer(share) | Deed::Damage(share) | Deed::Repeat(share) => share,
            Deed::Abort => 0.0,
            Deed::Ignore => continue,
        };
        if matches!(deed, Deed::Damage(_)) {
            // A flipped parity would be seen by the port: damage that the checksum alone can see.
            let middle = answer.len() / 2;
            let other = if answer.as_bytes()[middle] == b'7' {
                "8"
            } else {
                "7"
            };
            answer.replace_range(middle..=middle, other);
        }
        answer.push_str("\r\n");
        if matches!(deed, Deed::Repeat(_)) {
            answer = answer.repeat(2);
        }
        tokio::time::sleep(timeout.mul_f64(share)).await;
        if port.write_all(answer.as_bytes()).await.is_err() {
            return;
        }
        if ready {
            tokio::time::sleep(timeout / 4).await;
            let _ = port.write_all(format!("{address}\r\n").as_bytes()).await;
        }
    }
}

fn timing(timeout: Duration, retries: u32) -> Timing {
    Timing {
        timeout,
        character: Duration::from_micros(100),
        wake: false,
        retries,
    }
}

fn sensor(letter: char) -> Sdi12Address {
    Sdi12Address::new(letter).unwrap()
}

fn command(text: &str) -> Sdi12Command {
    Sdi12Command::parse(text).unwrap()
}

fn on_runtime<T>(future: impl Future<Output = T>) -> T {
    let mut builder = tokio::runtime::Builder::new_current_thread();
    builder.enable_all().build().unwrap().block_on(future)
}

/// Measures in turn over a pty; gives how many measurements succeeded. Any wrong value fails the test.
async fn right_of(
    asked: &[(char, &str)],
    deeds: Vec<Deed>,
    timeout: Duration,
    retries: u32,
    echo: bool,
) -> usize {
    let (near, far) = SerialStream::pair().unwrap();
    let server = tokio::spawn(serve(far, timeout, echo, deeds));
    let mut recorder = Recorder::new(near, timing(timeout, retries));
    let mut right = 0;
    for &(letter, text) in asked {
        let index = command(text).index;
        match recorder.measure(sensor(letter), command(text)).await {
            Ok(values) => {
                let due: Vec<f64> = (1..=5).map(|p| held(letter, index, p)).collect();
                assert_eq!(values, due, "{letter}{text}!");
                right += 1;
            }
            Err(Failure::Gone(error)) => panic!("{error}"),
            Err(_) => {}
        }
    }
    server.abort();
    right
}

#[test]
fn every_kind_of_measurement_gives_its_values() {
    let asked = [
        ('0', "M"),
        ('0', "M1"),
        ('a', "MC"),
        ('a', "MC1"),
        ('0', "C"),
        ('Z', "CC3"),
        ('0', "R0"),
        ('9', "RC4"),
    ];
    for echo in [false, true] {
        let deeds = vec![Deed::Answer(0.0)];
        // On a loaded machine an answer may miss the timeout.
        let right = on_runtime(right_of(&asked, deeds, Duration::from_millis(250), 3, echo));
        assert_eq!(right, asked.len(), "echo {echo}");
    }
}

#[test]
fn a_broken_off_measurement_is_begun_again() {
    // M, D0 without values, then M, D0, D1.
    let deeds = vec![
        Deed::Answer(0.0),
        Deed::Abort,
        Deed::Answer(0.0),
        Deed::Answer(0.0),
        Deed::Answer(0.0),
    ];
    let run = || {
        right_of(
            &[('0', "M")],
            deeds.clone(),
            Duration::from_millis(250),
            3,
            false,
        )
    };
    assert_eq!(on_runtime(run()), 1);
}

fn any_deed() -> impl Strategy<Value = Deed> {
    let share = 0.0..2.0_f64;
    prop_oneof![
        3 => share.clone().prop_map(Deed::Answer),
        4 => (0.0..0.3_f64).prop_map(Deed::Answer),
        1 => share.clone().prop_map(Deed::Repeat),
        1 => Just(Deed::Abort),
        1 => Just(Deed::Ignore),
    ]
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 10, max_shrink_iters: 0, ..ProptestConfig::default() })]

    /// Sensors that answer late, twice, or not at all may cost readings and never make a wrong one.
    #[test]
    fn a_late_answer_is_never_taken_for_the_next(
        deeds in prop::collection::vec(any_deed(), 1..24),
        asked in prop::collection::vec(prop::sample::select(vec![
            ('0', "M"), ('0', "MC2"), ('1', "M3"), ('0', "R0"), ('1', "RC1"), ('1', "C2"),
        ]), 6),
        retries in 0_u32..2,
    ) {
        on_runtime(right_of(&asked, deeds, Duration::from_millis(15), retries, false));
    }

    /// With checksums a damaged answer costs its reading and no more.
    #[test]
    fn a_checksum_catches_what_is_damaged(
        deeds in prop::collection::vec(prop_oneof![
            2 => Just(Deed::Answer(0.0)),
            1 => (0.0..0.4_f64).prop_map(Deed::Damage),
        ], 1..12),
    ) {
        let asked = [('0', "RC0"), ('1', "RC2"), ('0', "RC1")];
        on_runtime(right_of(&asked, deeds, Duration::from_millis(15), 1, false));
    }
}

fn channel(id: &str, address: char, text: &str, value: usize) -> Sdi12Channel {
    Sdi12Channel {
        id: id.into(),
        address: sensor(address),
        command: command(text),
        value,
    }
}

#[test]
fn a_sensor_does_one_measurement_at_a_time() {
    let waves = waves(&[
        channel("a", '0', "C", 1),
        channel("b", '0', "C", 2),
        channel("c", '1', "C", 1),
        channel("d", '0', "C1", 1),
        channel("e", '2', "M", 1),
    ]);
    let shape: Vec<Vec<String>> = waves
        .iter()
        .map(|w| {
            w.iter()
                .map(|m| format!("{}{} {}", m.address, m.command, m.channels.len()))
                .collect()
        })
        .collect();
    assert_eq!(shape, [vec!["0C 2", "1C 1", "2M 1"], vec!["0C1 1"]]);
}

#[test]
fn a_round_gives_each_channel_its_value_and_a_gap_where_there_is_none() {
    let channels = [
        channel("p", '0', "C", 1),
        channel("t", '0', "C", 5),
        channel("q", '1', "CC1", 2),
        channel("beyond", '1', "CC1", 6),
        channel("m", '2', "M", 3),
    ];
    let one = Conversion {
        scale: 1.0,
        offset: 0.0,
    };
    let (_stop, shutdown) = tokio::sync::watch::channel(false);
    let around = Surroundings {
        site: "test".to_owned(),
        clock: Arc::new(SetClock::new(Stamp(7))),
        conversions: Arc::new(Conversions::new::<_, Conversion>(
            channels.iter().map(|c| (c.id.clone(), one)),
            [],
        )),
        shutdown,
    };
    let timeout = Duration::from_millis(250);
    let mut sensors = Sensors {
        timing: timing(timeout, 3),
        every: timeout,
        waves: waves(&channels),
        absences: BTreeMap::new(),
        source: "line".into(),
    };
    let scan = on_runtime(async {
        let (near, far) = SerialStream::pair().unwrap();
        tokio::spawn(serve(far, timeout, false, vec![Deed::Answer(0.0)]));
        let mut rounds = Rounds {
            recorder: Recorder::new(near, sensors.timing),
            sensors: &mut sensors,
        };
        rounds.round(&around).await.unwrap()
    });
    assert!(scan.answered);
    let mut found: Vec<_> = scan
        .readings
        .iter()
        .map(|r| (&*r.channel.0, r.raw, r.quality))
        .collect();
    found.sort_by_key(|f| f.0);
    assert_eq!(
        found,
        [
            ("beyond", None, Quality::Missing),
            ("m", Some(held('2', 0, 3)), Quality::Good),
            ("p", Some(held('0', 0, 1)), Quality::Good),
            ("q", Some(held('1', 1, 2)), Quality::Good),
            ("t", Some(held('0', 0, 5)), Quality::Good),
        ]
    );
    assert_eq!(scan.rejected.len(), 1);
    assert_eq!(
        scan.rejected[0].detail,
        "\"1CC1!\" gave 5 values, value 6 is asked for"
    );
}
