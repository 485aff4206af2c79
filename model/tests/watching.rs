//! Commissioning and watch on a small invented site whose modes are known in closed form.
//!
//! The ground is a square with its edge held, so its modes are products of sines. Truth is stepped with the same
//! modes at other parameters; what is tested is the statistics, not the ground.

#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_possible_wrap,
    clippy::cast_sign_loss,
    reason = "a test that meets the unexpected should stop there"
)]

use borewake_model::block::Block;
use borewake_model::finding::Cause;
use borewake_model::watch::{Adoption, Watch, WatchState};
use borewake_model::weak_form::Parameter;
use nalgebra::DMatrix;

mod square;

use square::{BLOCK, LEAK_AT, ONSET, commissioned, record, settings};

/// Steps all blocks; returns the finding after the last one and whether there ever was one beyond the adoptions.
fn watch(
    blocks: &[Block],
    adoptions: &[Adoption],
) -> (Option<borewake_model::finding::Finding>, bool) {
    let mut watch = Watch::new(commissioned(), &settings(), adoptions).unwrap();
    let mut ever = false;
    let mut last = None;
    let judged = adoptions.iter().map(|a| a.block).max().unwrap_or(0);
    for block in blocks {
        last = watch.step(block).unwrap().finding;
        ever |= last.is_some() && block.index >= judged;
    }
    (last, ever)
}

#[test]
fn parameters_and_skin_are_recovered() {
    let calibration = &commissioned().calibration;
    let factor = |parameter| {
        calibration
            .factors
            .iter()
            .find(|(p, _)| *p == parameter)
            .map(|(_, f)| *f)
            .unwrap()
    };
    assert!((factor(Parameter::Transmissivity(0)) / 1.15 - 1.0).abs() < 0.03);
    assert!((factor(Parameter::Storativity(0)) / 0.9 - 1.0).abs() < 0.03);
    assert!(
        (calibration.skins[0] - 2.0).abs() < 0.15,
        "{:?}",
        calibration.skins
    );
    for (sd, correlation) in &calibration.left {
        assert!(
            (sd - 1.0).abs() < 0.35,
            "whitened departures have the scale {sd}"
        );
        assert!(
            correlation.abs() < 0.35,
            "and the correlation {correlation}"
        );
    }
}

#[test]
fn a_quiet_record_stays_quiet_with_and_without_gaps() {
    assert!(!watch(&record(0.0, 0.0, 7), &[]).1);
    assert!(!watch(&record(0.0, 0.1, 7), &[]).1);
}

#[test]
fn a_restored_watch_goes_on_bit_by_bit() {
    let blocks = record(4e-4, 0.05, 11);
    let mut straight = Watch::new(commissioned(), &settings(), &[]).unwrap();
    let stop = ONSET + 11;
    for block in &blocks[..stop] {
        straight.step(block).unwrap();
    }
    let bytes = postcard::to_allocvec(&straight.save()).unwrap();
    let state: WatchState = postcard::from_bytes(&bytes).unwrap();
    let mut restored = Watch::restore(commissioned(), &settings(), &[], state).unwrap();
    for block in &blocks[stop..stop + 40] {
        assert_eq!(straight.step(block).unwrap(), restored.step(block).unwrap());
    }
    assert_eq!(straight.save(), restored.save());
}

#[test]
fn a_block_out_of_order_is_refused() {
    let blocks = record(0.0, 0.0, 7);
    let mut watch = Watch::new(commissioned(), &settings(), &[]).unwrap();
    watch.step(&blocks[0]).unwrap();
    assert!(watch.step(&blocks[2]).is_err());
}

#[test]
fn a_leak_is_found_and_silent_once_adopted() {
    let leak = 4e-4;
    let blocks = record(leak, 0.0, 7);
    let (finding, _) = watch(&blocks, &[]);
    let finding = finding.expect("a leak of a twentieth of the flow is found");
    assert_eq!(finding.causes[0].cause, Cause::Leak);
    assert!(
        (finding.onset / BLOCK - ONSET as f64).abs() < 8.0,
        "onset {}",
        finding.onset / BLOCK
    );
    let place = finding.place.unwrap();
    assert!(
        (place.x - LEAK_AT[0]).hypot(place.y - LEAK_AT[1]) < 200.0,
        "{place:?}"
    );
    let size = finding.size.unwrap();
    assert!((size.value / leak - 1.0).abs() < 0.2, "{size:?}");

    let adoption = Adoption {
        block: ONSET as i64 + 80,
        cause: Cause::Leak,
        subject: finding.causes[0].subject,
        onset: finding.onset,
        onset_sd: finding.onset_sd,
        size: finding.size,
        place: finding.place,
    };
    let (after, ever) = watch(&blocks, &[adoption]);
    assert!(
        after.is_none() && !ever,
        "an adopted leak is no news: {after:?}"
    );
}

#[test]
fn a_site_without_neighbours_tells_a_leak_in_finite_numbers() {
    let mut alone = commissioned().clone();
    alone.ground.neighbours.clear();
    alone.reduced.neighbours = DMatrix::zeros(alone.reduced.neighbours.nrows(), 0);
    let mut watch = Watch::new(&alone, &settings(), &[]).unwrap();
    let mut found = None;
    for block in &record(4e-4, 0.0, 7) {
        found = watch.step(block).unwrap().finding.or(found);
    }
    let found = found.expect("a leak of a twentieth of the flow is found");
    assert_eq!(found.causes[0].cause, Cause::Leak);
    for weighed in &found.causes {
        assert_ne!(weighed.cause, Cause::Interference);
        assert!(weighed.log_evidence.is_finite(), "{weighed:?}");
    }
}
