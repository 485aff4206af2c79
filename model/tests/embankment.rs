//! The watch of an embankment on an invented record, from commissioning to alarm.

#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_possible_wrap,
    clippy::cast_sign_loss,
    reason = "a test that meets the unexpected should stop there"
)]

use std::sync::OnceLock;

use borewake_model::block::{Block, GaugeBlock, RateKnown, RatePath};
use borewake_model::finding::{Cause, Finding, Subject};
use borewake_model::forecast::{Bound, Horizon, RatePlan};
use borewake_model::ground::{Edge, EdgeKind, Gauge, Ground, Seat};
use borewake_model::lagged::{Commissioned, Driver, Embankment, commission};
use borewake_model::watch::{Blind, Step, Watch, WatchSettings};

#[path = "../../tests/src/embankment.rs"]
#[allow(
    dead_code,
    unreachable_pub,
    reason = "shared with the end-to-end tests"
)]
mod invented;

use invented::{DAY, NOISE, PIEZOMETERS, START, Story, record};

const BLOCK: f64 = 21_600.0;
const READ: f64 = 10_800.0;
const WATER: f64 = 9_806.65;
/// Days of commissioning.
const LEARNED: f64 = 730.0;

fn ground() -> Ground {
    Ground {
        layers: Vec::new(),
        zones: Vec::new(),
        edge: Edge {
            kind: EdgeKind::Open,
            distance: 0.0,
        },
        barriers: Vec::new(),
        stages: Vec::new(),
        wells: Vec::new(),
        gauges: (0..PIEZOMETERS.len())
            .map(|i| Gauge {
                name: format!("P-{i}"),
                seat: Seat::InGround {
                    at: [10.0 * i as f64, 0.0],
                    layer: 0,
                },
                noise: NOISE,
                drift: 500.0 / (365.25 * DAY),
            })
            .collect(),
        neighbours: Vec::new(),
    }
}

fn embankment() -> Embankment {
    Embankment {
        drives: vec![Driver::Pool, Driver::Rain],
        season: true,
        ageing: true,
    }
}

fn blocks(days: f64, story: &Story) -> Vec<Block> {
    let samples = record(days + 1.0, READ, story);
    let per_block = (BLOCK / READ) as usize;
    samples
        .windows(per_block + 1)
        .step_by(per_block)
        .take((days * DAY / BLOCK) as usize)
        .map(|around| {
            // A level holds up to its instant.
            let (two, ends) = (&around[..per_block], &around[1..]);
            let path = |value: &dyn Fn(&invented::Sample) -> f64| RatePath {
                pieces: ends
                    .iter()
                    .enumerate()
                    .map(|(i, s)| ((i + 1) as f64 * READ, value(s)))
                    .collect(),
                known: RateKnown::Read,
            };
            let count = two.len() as f64;
            Block {
                index: (two[0].time / BLOCK) as i64,
                length: BLOCK,
                instants: (0..two.len()).map(|i| i as f64 * READ).collect(),
                rates: vec![path(&|s| WATER * s.pool), path(&|s| s.rain)],
                gauges: (0..PIEZOMETERS.len())
                    .map(|g| {
                        Some(GaugeBlock {
                            mean: two.iter().map(|s| s.gauges[g]).sum::<f64>() / count,
                            count: 2,
                            weights: vec![1.0 / count; two.len()],
                            changed: true,
                        })
                    })
                    .collect(),
            }
        })
        .collect()
}

fn learned() -> usize {
    (LEARNED * DAY / BLOCK) as usize
}

/// Commissioned on two years, and the watch at their end.
fn commissioned() -> &'static (Commissioned, Watch) {
    static ONCE: OnceLock<(Commissioned, Watch)> = OnceLock::new();
    ONCE.get_or_init(|| {
        let history = blocks(LEARNED, &Story::default());
        let calibration = commission(&ground(), &embankment(), &history, &mut |_| {}).unwrap();
        let commissioned = Commissioned {
            ground: ground(),
            embankment: embankment(),
            calibration,
        };
        let mut watch = Watch::new(&commissioned, &settings(), &[]).unwrap();
        for block in &history {
            assert!(watch.step(block).unwrap().finding.is_none());
        }
        (commissioned, watch)
    })
}

fn settings() -> WatchSettings {
    WatchSettings {
        false_alarm_interval: 5.0 * 365.25 * DAY,
        first_onset: (START / BLOCK) as i64 + learned() as i64,
    }
}

/// Watches what follows commissioning.
fn watch(days: f64, story: &Story) -> Vec<Step> {
    let mut watch = commissioned().1.clone();
    blocks(days, story)[learned()..]
        .iter()
        .map(|block| watch.step(block).unwrap())
        .collect()
}

/// Day of the record after which a finding first stood, and the finding some days later.
fn told(steps: &[Step], later: f64) -> (f64, Finding) {
    let day = |s: &Step| ((s.block + 1) as f64 * BLOCK - START) / DAY;
    let first = steps.iter().find(|s| s.finding.is_some());
    let first = day(first.expect("no finding"));
    let at = steps.iter().find(|s| day(s) >= first + later).unwrap();
    (first, at.finding.clone().expect("it did not last"))
}

#[test]
fn each_piezometer_is_known_by_its_answer() {
    let (commissioned, _) = commissioned();
    let calibration = &commissioned.calibration;
    println!(
        "memory of the wander {} d",
        calibration.stochastic.wander_memory / DAY
    );
    for (gauge, (answer, (place, time))) in calibration.answers.iter().zip(PIEZOMETERS).enumerate()
    {
        // The slab's lasting answer is 1 - x, at the mean level; its mean delay x (2 - x) / 6 of its time.
        let (response, lag) = (1.0 - place, place * (2.0 - place) / 6.0 * time);
        println!(
            "P-{gauge}: response {:.3} +- {:.3} ({response:.3}), lag {:.1} +- {:.1} d ({lag:.1}), season {:.0} +- {:.0} Pa, ageing {:.0} +- {:.0} Pa, explained {:.4}, noise {:.1}, left {:?}, wander {:.1}, inflate {:.2}",
            answer.response.0,
            answer.response.1,
            answer.lag.0 / DAY,
            answer.lag.1 / DAY,
            answer.season.0,
            answer.season.1,
            answer.ageing.0,
            answer.ageing.1,
            answer.explained,
            calibration.noise[gauge],
            calibration.left[gauge],
            calibration.stochastic.wander[gauge],
            calibration.inflate[gauge],
        );
        assert!((answer.response.0 - response).abs() < 0.03 + 3.0 * answer.response.1);
        assert!((answer.lag.0 / DAY - lag).abs() < 0.1 * lag + 3.0 * answer.lag.1 / DAY + 1.0);
        assert!(answer.explained > 0.98);
        assert!(calibration.left[gauge].1.abs() < 0.1);
    }
}

#[test]
fn two_quiet_years_stay_quiet_and_the_band_holds() {
    for seed in 0..1 {
        let steps = watch(
            1460.0,
            &Story {
                seed,
                ..Story::default()
            },
        );
        let worst = steps.iter().map(|s| s.log_mixture).fold(f64::MIN, f64::max);
        let mut within = [0_u32; 6];
        let mut all = 0_u32;
        for step in &steps {
            all += 1;
            for (gauge, sum) in within.iter_mut().enumerate() {
                let (departure, sd) = (
                    step.departures[gauge].unwrap(),
                    step.expectations[gauge].unwrap().sd,
                );
                *sum += u32::from(departure.abs() < 1.96 * sd);
            }
        }
        let shares: Vec<f64> = within
            .iter()
            .map(|w| f64::from(*w) / f64::from(all))
            .collect();
        let blind = steps.iter().filter(|s| s.blind[0].is_some()).count();
        println!(
            "{blind} of {all} blocks blind; worst {worst:.1} of {:.1}; within the band {shares:.3?}",
            steps[0].log_threshold
        );
        assert!(steps.iter().all(|s| s.finding.is_none()), "worst {worst}");
        let mean = shares.iter().sum::<f64>() / 6.0;
        assert!((0.91..0.985).contains(&mean), "{shares:?}");
    }
}

#[test]
fn a_core_that_loses_pressure_drop_is_told_as_unexplained() {
    let story = Story {
        rise: Some((915.0, 0.01)),
        ..Story::default()
    };
    let steps = watch(1100.0, &story);
    let (day, finding) = told(&steps, 20.0);
    let onset = (finding.onset - START) / DAY;
    println!(
        "told on day {day:.1}, onset day {onset:.1} +- {:.1}, {:?} {:?}",
        finding.onset_sd / DAY,
        finding.causes,
        finding.gauges
    );
    assert!((915.0..930.0).contains(&day));
    assert_eq!(finding.causes[0].cause, Cause::Unexplained);
    assert!((onset - 917.0).abs() < 8.0);
    let mut gauges: Vec<usize> = finding.gauges.iter().take(2).map(|g| g.0).collect();
    gauges.sort_unstable();
    assert_eq!(gauges, [3, 4]);
    // About one hundredth of the pool's pressure.
    assert!(
        finding
            .gauges
            .iter()
            .take(2)
            .all(|g| (2_500.0..6_000.0).contains(&g.1))
    );
}

#[test]
fn a_step_and_a_drift_are_named() {
    let story = Story {
        step: Some((900.0, 2, 900.0)),
        ..Story::default()
    };
    let (day, finding) = told(&watch(960.0, &story), 5.0);
    println!("step told on day {day:.1}: {finding:?}");
    assert!((900.0..903.0).contains(&day));
    assert!(finding.named);
    assert_eq!(finding.causes[0].cause, Cause::GaugeStep);
    assert_eq!(finding.causes[0].subject, Some(Subject::Gauge(2)));
    let size = finding.size.unwrap();
    assert!((size.value - 900.0).abs() < 4.0 * size.sd + 50.0);

    let story = Story {
        drift: Some((900.0, 1, 6_000.0)),
        ..Story::default()
    };
    let (day, finding) = told(&watch(1100.0, &story), 20.0);
    println!("drift told on day {day:.1}: {finding:?}");
    assert!((900.0..1_040.0).contains(&day));
    assert_eq!(finding.causes[0].cause, Cause::GaugeDrift);
    assert_eq!(finding.causes[0].subject, Some(Subject::Gauge(1)));
}

#[test]
fn a_pool_beyond_all_that_was_widens_the_band_and_blinds() {
    let story = Story {
        flood: Some((935.0, 4.0)),
        ..Story::default()
    };
    let steps = watch(980.0, &story);
    let usual = steps[20].expectations[0].unwrap().sd;
    let blind: Vec<&Step> = steps
        .iter()
        .filter(|s| s.blind[0] == Some(Blind::Model))
        .collect();
    println!("{} blocks blind", blind.len());
    assert!(blind.len() > 20);
    assert!(
        blind
            .iter()
            .all(|s| s.expectations[0].is_none_or(|e| e.sd > 2.0 * usual))
    );
    assert!(steps.iter().all(|s| s.finding.is_none()));
    assert!(steps.last().unwrap().blind[0].is_none());
}

#[test]
fn a_pool_that_is_not_read_blinds_and_a_saved_watch_goes_on_bit_by_bit() {
    let (commissioned, at_end) = commissioned();
    let mut rest = blocks(LEARNED + 20.0, &Story::default()).split_off(learned());
    let mut straight = at_end.clone();
    let mut restored = Watch::restore(commissioned, &settings(), &[], at_end.save()).unwrap();
    for block in &rest {
        assert_eq!(straight.step(block).unwrap(), restored.step(block).unwrap());
    }
    let mut last = rest.pop().unwrap();
    last.index += 1;
    last.rates[0].known = RateKnown::Stale;
    let step = straight.step(&last).unwrap();
    assert!(step.blind.iter().all(|b| *b == Some(Blind::StaleRate)));
}

#[test]
fn history_that_teaches_nothing_is_refused() {
    let short = blocks(100.0, &Story::default());
    let why = commission(&ground(), &embankment(), &short, &mut |_| {}).unwrap_err();
    assert!(why.to_string().contains("100 days"), "{why}");
    let mut still = blocks(400.0, &Story::default());
    for block in &mut still {
        for piece in &mut block.rates[0].pieces {
            piece.1 = 3e5;
        }
    }
    let why = commission(&ground(), &embankment(), &still, &mut |_| {}).unwrap_err();
    assert!(
        why.to_string().contains("the pool moved by 0.000 m"),
        "{why}"
    );
}

#[test]
fn what_comes_is_foreseen_at_the_last_pool_and_the_usual_rain() {
    let (commissioned, watch) = commissioned();
    let horizon = Horizon {
        blocks: 120,
        instants: vec![0.0, READ],
    };
    let limits: Vec<Bound> = (0..PIEZOMETERS.len())
        .map(|gauge| Bound {
            gauge,
            above: true,
            value: 1e9,
        })
        .collect();
    let forecast = watch
        .forecast(&RatePlan::default(), &horizon, &limits)
        .unwrap();
    let history = blocks(LEARNED, &Story::default());
    let last = history.last().unwrap();
    let pool = last.rates[0].pieces.last().unwrap().1;
    let rain = commissioned.calibration.scaling.centre[1];
    for (held, right) in forecast.held.iter().zip([pool, rain]) {
        assert!((held - right).abs() < 1e-9 * right.abs());
    }
    assert_eq!(forecast.blocks.len(), 120);
    assert!(forecast.passages.iter().all(|p| p.share == 0.0));
    // It begins where the gauges are, and grows less sure.
    for (gauge, expected) in forecast.blocks[0].gauges.iter().enumerate() {
        let read = last.gauges[gauge].as_ref().unwrap().mean;
        assert!(
            (expected.mean - read).abs() < 6.0 * expected.sd,
            "{gauge}: {expected:?} against {read}"
        );
        let end = forecast.blocks[119].gauges[gauge];
        assert!(end.mean.is_finite() && end.sd >= 0.99 * expected.sd);
    }
}

#[test]
fn silent_rain_is_as_usual_and_blinds_nobody() {
    let centre = commissioned().0.calibration.scaling.centre[1];
    let story = Story::default();
    let next = &blocks(LEARNED + 5.0, &story)[learned()..];
    let (mut lapsed, mut usual) = (commissioned().1.clone(), commissioned().1.clone());
    for block in next {
        let with = |value: f64, known| {
            let mut block = block.clone();
            block.rates[1] = RatePath {
                pieces: vec![(BLOCK, value)],
                known,
            };
            block
        };
        // A storm that never ended, as the last reading has it.
        let a = lapsed.step(&with(1e-5, RateKnown::Lapsed)).unwrap();
        let b = usual.step(&with(centre, RateKnown::Read)).unwrap();
        assert_eq!(a, b);
        assert!(a.blind.iter().all(Option::is_none));
    }
}

#[test]
fn a_level_that_was_only_held_is_no_level_of_the_history() {
    let mut history = blocks(400.0, &Story::default());
    for block in &mut history[..40] {
        block.rates[0] = RatePath {
            pieces: vec![(BLOCK, 0.0)],
            known: RateKnown::Stale,
        };
    }
    let calibration = commission(&ground(), &embankment(), &history, &mut |_| {}).unwrap();
    let pools = history[40..].iter().flat_map(|b| &b.rates[0].pieces);
    let least = pools.map(|p| p.1).fold(f64::INFINITY, f64::min);
    assert!(calibration.scaling.range[0].0 >= least);
    let never = |block: &Block| {
        let mut block = block.clone();
        block.rates[1].known = RateKnown::Lapsed;
        block
    };
    let dry: Vec<Block> = history.iter().map(never).collect();
    let why = commission(&ground(), &embankment(), &dry, &mut |_| {}).unwrap_err();
    assert!(why.to_string().contains("rain"), "{why}");
}
