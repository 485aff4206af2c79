//! Forecasts on a small invented site: against what its closed form does next, and against limits.

#![allow(
    clippy::unwrap_used,
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_precision_loss,
    clippy::cast_possible_wrap,
    reason = "a test that meets the unexpected should stop there"
)]

use borewake_model::block::Block;
use borewake_model::forecast::{Bound, Forecast, Horizon, RatePlan};
use borewake_model::watch::{Watch, WatchSettings};

mod square;

use square::{ALL, BLOCK, HISTORY, SAMPLES, commissioned, record, settings};

/// A watch that weighs no causes, which forecasts do not need.
fn unread() -> Watch {
    let settings = WatchSettings {
        first_onset: i64::MAX,
        ..settings()
    };
    Watch::new(commissioned(), &settings, &[]).unwrap()
}

/// The watch after so many blocks of a record.
fn watched(blocks: &[Block]) -> Watch {
    let mut watch = unread();
    for block in blocks {
        watch.step(block).unwrap();
    }
    watch
}

/// What the wells did in the blocks to come, as a plan.
fn done(blocks: &[Block]) -> RatePlan {
    let wells = blocks[0].rates.len();
    let steps = |well: usize| {
        blocks
            .iter()
            .flat_map(|block| {
                let mut from = 0.0;
                block.rates[well]
                    .pieces
                    .iter()
                    .map(|&(until, rate)| {
                        let at = block.start() + from;
                        from = until;
                        (at, rate)
                    })
                    .collect::<Vec<_>>()
            })
            .collect()
    };
    RatePlan {
        wells: (0..wells).map(steps).collect(),
    }
}

/// So many blocks, read when those of the record are.
fn horizon(blocks: usize) -> Horizon {
    Horizon {
        blocks,
        instants: (0..SAMPLES)
            .map(|i| i as f64 * BLOCK / SAMPLES as f64)
            .collect(),
    }
}

/// Readings less mean in standard deviations, all gauges.
fn scores(forecast: &Forecast, blocks: &[Block]) -> Vec<f64> {
    let mut scores = Vec::new();
    for (ahead, block) in forecast.blocks.iter().zip(blocks) {
        assert_eq!(ahead.block, block.index);
        for (expected, read) in ahead.gauges.iter().zip(&block.gauges) {
            scores.push((read.as_ref().unwrap().mean - expected.mean) / expected.sd);
        }
    }
    scores
}

#[test]
fn what_comes_lies_within_the_band() {
    // Several records, because departures of one forecast go together.
    let (mut inside, mut all, mut worst) = (0_u32, 0_u32, 0.0_f64);
    for seed in [3, 5, 11, 13, 17, 19] {
        let blocks = record(0.0, 0.0, seed);
        let mut watch = unread();
        for (index, block) in blocks.iter().enumerate() {
            if index == HISTORY + 21 || index == HISTORY + 120 {
                let to_come = &blocks[index..index + 100];
                let forecast = watch.forecast(&done(to_come), &horizon(100), &[]).unwrap();
                let scores = scores(&forecast, to_come);
                let within = scores.iter().filter(|z| z.abs() <= 1.96).count();
                inside += within as u32;
                all += scores.len() as u32;
                worst = scores.iter().fold(worst, |w, z| w.max(z.abs()));
            }
            watch.step(block).unwrap();
        }
    }
    let share = f64::from(inside) / f64::from(all);
    println!("{inside} of {all} within the 95 % band; farthest {worst:.2} standard deviations");
    assert!((0.90..=0.995).contains(&share), "{share}");
    assert!(worst < 6.0, "{worst}");
}

#[test]
fn the_next_block_is_surer_than_one_a_month_away_and_close_to_it() {
    let blocks = record(0.0, 0.0, 7);
    let from = HISTORY + 60;
    let watch = watched(&blocks[..from]);
    let forecast = watch
        .forecast(&done(&blocks[from..]), &horizon(100), &[])
        .unwrap();
    // The gauge in the well is surer while its well is shut in.
    for gauge in 1..4 {
        let next = forecast.blocks[0].gauges[gauge];
        let far = forecast.blocks[99].gauges[gauge];
        assert!(next.sd < far.sd, "{next:?} {far:?}");
        let read = blocks[from].gauges[gauge].as_ref().unwrap().mean;
        assert!((read - next.mean).abs() < 4.0 * next.sd);
    }
    // It leaves the watch as it was, and comes out the same again.
    assert_eq!(
        watch
            .forecast(&done(&blocks[from..]), &horizon(100), &[])
            .unwrap(),
        forecast
    );
}

#[test]
fn the_time_to_a_limit_is_that_of_the_closed_form() {
    let blocks = record(0.0, 0.0, 7);
    let from = HISTORY + 30;
    let watch = watched(&blocks[..from]);
    let to_come = &blocks[from..ALL];
    let gauge = 3;
    let means: Vec<f64> = to_come
        .iter()
        .map(|b| b.gauges[gauge].as_ref().unwrap().mean)
        .collect();
    // A limit that what really came passes for good measure: halfway between its first and its highest block mean.
    let highest = means.iter().copied().fold(f64::MIN, f64::max);
    let value = f64::midpoint(means[0], highest);
    let reached = means.iter().position(|m| *m >= value).unwrap();
    let truth = (to_come[reached].index as f64 + 0.5) * BLOCK;
    let bound = |value: f64| Bound {
        gauge,
        above: true,
        value,
    };
    let limits = [bound(value), bound(highest + 1e6), bound(means[0] - 1e5)];
    let forecast = watch
        .forecast(&done(to_come), &horizon(to_come.len()), &limits)
        .unwrap();
    let passage = forecast.passages[0];
    let [early, middle, late] = passage.spread.map(Option::unwrap);
    println!(
        "truth {truth:.0}, mean {:?}, {early:.0} to {late:.0}",
        passage.mean
    );
    assert!(early <= middle && middle <= late);
    assert!((early - BLOCK..=late + BLOCK).contains(&truth));
    assert!((passage.mean.unwrap() - truth).abs() < 4.0 * BLOCK);
    assert!(passage.share > 0.95);
    let never = forecast.passages[1];
    assert_eq!(
        (never.mean, never.spread, never.share),
        (None, [None; 3], 0.0)
    );
    let at_once = forecast.passages[2];
    let first = (to_come[0].index as f64 + 0.5) * BLOCK;
    assert_eq!(at_once.mean, Some(first));
    assert_eq!(at_once.spread, [Some(first); 3]);
}

#[test]
fn a_well_keeps_its_rate_until_the_plan_says_otherwise() {
    let blocks = record(0.0, 0.0, 7);
    let watch = watched(&blocks[..HISTORY]);
    let held = watch.last_rates().unwrap();
    let start = HISTORY as f64 * BLOCK;
    let plan = RatePlan {
        wells: vec![vec![], vec![(start + 2.5 * BLOCK, 0.0)]],
    };
    let forecast = watch.forecast(&plan, &horizon(5), &[]).unwrap();
    let rates = |block: usize| forecast.blocks[block].rates.clone();
    let close = |a: &[f64], b: &[f64]| a.iter().zip(b).all(|(a, b)| (a - b).abs() < 1e-12);
    assert_eq!(forecast.held, held);
    assert!(close(&rates(0), &held));
    assert!(close(&rates(2), &[held[0], 0.5 * held[1]]));
    assert!(close(&rates(4), &[held[0], 0.0]));
    assert!(unread().forecast(&plan, &horizon(5), &[]).is_err());
}
