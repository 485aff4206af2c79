//! What commissioning makes of histories with flaws, and of a ground other than the one described.

#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_possible_wrap,
    clippy::cast_sign_loss,
    reason = "a test that meets the unexpected should stop there"
)]

use borewake_model::ModelError;
use borewake_model::block::Block;
use borewake_model::commission::{
    Account, Calibration, CommissionSettings, Figure, commission, commission_leaky,
};
use borewake_model::weak_form::Parameter;

mod square;

use square::{HISTORY, ground, leaking_record, record, reduced};

const T: Parameter = Parameter::Transmissivity(0);
const S: Parameter = Parameter::Storativity(0);

fn fitted(blocks: &[Block]) -> Result<(Calibration, Account), ModelError> {
    let ground = ground();
    let settings = CommissionSettings::default();
    commission(&ground, &reduced(&ground), blocks, &settings, &mut |_| {})
}

fn quiet() -> Vec<Block> {
    let mut blocks = record(0.0, 0.0, 7);
    blocks.truncate(HISTORY);
    blocks
}

fn factor(calibration: &Calibration, parameter: Parameter) -> (f64, f64) {
    let at = calibration
        .factors
        .iter()
        .position(|(p, _)| *p == parameter);
    let at = at.unwrap();
    (calibration.factors[at].1, calibration.factor_sd[at])
}

fn refused(blocks: &[Block]) -> String {
    fitted(blocks)
        .expect_err("such a history is refused")
        .to_string()
}

#[test]
fn a_few_outliers_move_no_figure() {
    let clean = fitted(&quiet()).unwrap();
    assert_eq!(clean.1.aside(), [], "there is nothing to set aside");
    // One block mean in two hundred: spikes of 40 to 600 times the noise, a zero, and one twice as high as it can be.
    let mut blocks = quiet();
    let planted = [
        (23, 0, 4e3),
        (57, 1, -6e3),
        (101, 2, 2.4e4),
        (148, 3, -1.25e7),
        (190, 1, 1.1e7),
    ];
    for (block, gauge, by) in planted {
        blocks[block].gauges[gauge].as_mut().unwrap().mean += by;
    }
    let (calibration, account) = fitted(&blocks).unwrap();
    let mut aside = account.aside();
    aside.sort_unstable();
    for (block, gauge, by) in planted {
        assert!(
            aside.contains(&(block as i64, gauge)),
            "{by} Pa at block {block}: {aside:?}"
        );
    }
    assert!(aside.len() <= 7, "hardly any other is set aside: {aside:?}");
    for parameter in [T, S] {
        let (with, sd) = factor(&calibration, parameter);
        let (without, _) = factor(&clean.0, parameter);
        let moved = (with / without).ln() / sd;
        assert!(
            moved.abs() < 0.5,
            "{parameter:?} moved by {moved} of its own sd"
        );
    }
    let skin = (calibration.skins[0] - clean.0.skins[0]) / calibration.skin_sd[0];
    assert!(skin.abs() < 0.5, "skin moved by {skin} of its own sd");
}

#[test]
fn gaps_move_figures_by_less_than_their_doubt() {
    let (clean, _) = fitted(&quiet()).unwrap();
    let mut blocks = quiet();
    for (index, block) in blocks.iter_mut().enumerate() {
        if (60..76).contains(&index) {
            block.gauges[1] = None;
        }
        if (120..124).contains(&index) {
            block.gauges.fill(None);
        }
    }
    let (calibration, account) = fitted(&blocks).unwrap();
    assert_eq!(account.gauges[1].missing, 20);
    for parameter in [T, S] {
        let (with, sd) = factor(&calibration, parameter);
        let moved = (with / factor(&clean, parameter).0).ln() / sd;
        assert!(
            moved.abs() < 1.0,
            "{parameter:?} moved by {moved} of its own sd"
        );
    }
}

#[test]
fn a_history_without_a_change_of_rate_is_refused() {
    let mut blocks = quiet();
    for path in blocks.iter_mut().flat_map(|b| &mut b.rates) {
        path.pieces.iter_mut().for_each(|piece| piece.1 = 4e-3);
    }
    let told = refused(&blocks);
    assert!(
        told.contains("the rate of W1 and W2 never changes"),
        "{told}"
    );
    assert!(told.contains("shut in a well"), "{told}");
    for path in blocks.iter_mut().flat_map(|b| &mut b.rates) {
        path.pieces.iter_mut().for_each(|piece| piece.1 = 0.0);
    }
    let told = refused(&blocks);
    assert!(told.contains("zero throughout"), "{told}");
}

#[test]
fn a_gauge_that_was_never_read_is_named() {
    let mut blocks = quiet();
    for block in &mut blocks {
        block.gauges[2] = None;
    }
    let told = refused(&blocks);
    assert!(told.contains("no usable reading of O2"), "{told}");
    assert!(told.contains("take the gauge out"), "{told}");
}

#[test]
fn a_rate_of_the_wrong_sign_is_named_with_its_well() {
    let mut blocks = quiet();
    for block in &mut blocks {
        block.rates[1].pieces.iter_mut().for_each(|p| p.1 = -p.1);
    }
    let told = refused(&blocks);
    assert!(told.contains("the rate of W2"), "{told}");
    assert!(
        told.contains("(injection)") && told.contains("scale = -1"),
        "{told}"
    );
    for block in &mut blocks {
        block.rates[0].pieces.iter_mut().for_each(|p| p.1 = -p.1);
    }
    let told = refused(&blocks);
    assert!(told.contains("the rates of W1 and W2"), "{told}");
}

#[test]
fn a_gauge_that_reads_the_wrong_way_is_named() {
    let mut blocks = quiet();
    for block in &mut blocks {
        let read = block.gauges[3].as_mut().unwrap();
        read.mean = 3e7 - read.mean;
    }
    let told = refused(&blocks);
    assert!(
        told.contains("gauge O3") && told.contains("depth to water"),
        "{told}"
    );
}

#[test]
fn what_no_gauge_sees_keeps_its_prior() {
    let (_, account) = fitted(&quiet()).unwrap();
    let told: Vec<Figure> = account.known.iter().map(|k| k.figure).collect();
    assert_eq!(
        told,
        [Figure::Parameter(T), Figure::Parameter(S), Figure::Skin(0)],
        "no gauge sits in W2"
    );
    for known in &account.known {
        assert!(known.sd < 0.3 * known.prior_sd, "{known:?}");
        assert!(
            known
                .mixed
                .iter()
                .all(|(_, share)| (0.5..=1.0).contains(share))
        );
    }
}

#[test]
fn a_leaky_ground_is_told_from_a_tight_one_by_evidence() {
    let ground = ground();
    let reduced = reduced(&ground);
    // A leakage factor of 900 m: L = T/B^2, and L/S is what seeps away.
    let (t, s) = (1.15 * 4e-9, 0.9 * 4e-9);
    let leakance = t / 900_f64.powi(2);
    let mut blocks = leaking_record(0.0, 0.0, 7, leakance / s);
    blocks.truncate(HISTORY);
    let (_, plain) = fitted(&blocks).unwrap();
    let settings = CommissionSettings {
        aside: Some(plain.aside()),
        ..CommissionSettings::default()
    };
    let (tried, calibration, _) =
        commission_leaky(&ground, &reduced, &blocks, &settings, &mut |_| {}).unwrap();
    let gain = tried.log_evidence - plain.tried[0].log_evidence;
    assert!(gain > 20.0, "log evidence for a leak {gain}");
    let (found_t, found_s) = (factor(&calibration, T).0, factor(&calibration, S).0);
    assert!((found_t / 1.15 - 1.0).abs() < 0.05, "T {found_t}");
    assert!((found_s / 0.9 - 1.0).abs() < 0.10, "S {found_s}");
    let found = tried.leakance.unwrap();
    assert!(
        (found / leakance - 1.0).abs() < 0.2,
        "{found} for {leakance}"
    );
    // A tight ground is not taken for a leaky one.
    let blocks = &quiet()[..HISTORY / 2];
    let (_, plain) = fitted(blocks).unwrap();
    let (tried, _, _) =
        commission_leaky(&ground, &reduced, blocks, &settings, &mut |_| {}).unwrap();
    let gain = tried.log_evidence - plain.tried[0].log_evidence;
    assert!(
        gain < 3.0,
        "log evidence for a leak that is not there {gain}"
    );
}
