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

use std::sync::OnceLock;

use borewake_model::block::{Block, GaugeBlock, RateKnown, RatePath};
use borewake_model::commission::{CommissionSettings, Commissioned, commission, places};
use borewake_model::finding::Cause;
use borewake_model::ground::{Edge, EdgeKind, Gauge, Ground, Layer, Neighbour, Point, Seat, Well};
use borewake_model::reduce::{Certificate, Modal, Reduced, ReducedBlock};
use borewake_model::watch::{Adoption, Watch, WatchSettings, WatchState};
use borewake_model::weak_form::Parameter;
use nalgebra::{DMatrix, DVector};

const BLOCK: f64 = 10_800.0;
const SAMPLES: usize = 6;
const HISTORY: usize = 240;
const ALL: usize = 480;
const ONSET: usize = 320;
const HALF: f64 = 4_000.0;
const ORDER: u32 = 13;
const LEAK_AT: Point = [150.0, -250.0];

/// A repeatable source of normal deviates (xorshift, Marsaglia 2003; Box & Muller 1958).
struct Dice(u64);

impl Dice {
    fn uniform(&mut self) -> f64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        ((self.0 >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    }

    fn normal(&mut self) -> f64 {
        (-2.0 * self.uniform().ln()).sqrt() * (std::f64::consts::TAU * self.uniform()).cos()
    }
}

fn ground() -> Ground {
    let well = |name: &str, at: Point| Well {
        name: name.to_owned(),
        at,
        layer: 0,
        also: Vec::new(),
        radius: 0.1,
        skin: 0.0,
        storage: 0.0,
        trace: Vec::new(),
    };
    let gauge = |name: &str, seat: Seat| Gauge {
        name: name.to_owned(),
        seat,
        noise: 100.0,
        drift: 1e3 / (365.25 * 86_400.0),
    };
    let at = |x: f64, y: f64| Seat::InGround {
        at: [x, y],
        layer: 0,
    };
    Ground {
        layers: vec![Layer {
            name: "sand".to_owned(),
            transmissivity: 4e-9,
            storativity: 4e-9,
            anisotropy: None,
            leakance_below: None,
        }],
        zones: Vec::new(),
        edge: Edge {
            kind: EdgeKind::Fixed,
            distance: HALF,
        },
        barriers: Vec::new(),
        stages: Vec::new(),
        wells: vec![well("W1", [-400.0, 100.0]), well("W2", [500.0, 200.0])],
        gauges: vec![
            gauge("W1", Seat::InWell(0)),
            gauge("O1", at(-200.0, -400.0)),
            gauge("O2", at(300.0, -300.0)),
            gauge("O3", at(100.0, 400.0)),
        ],
        neighbours: vec![Neighbour {
            name: "N1".to_owned(),
            at: [1_500.0, -900.0],
            layer: 0,
        }],
    }
}

fn ports(at: &[Point], storativity: f64) -> DMatrix<f64> {
    let side = 2.0 * HALF;
    let orders: Vec<(f64, f64)> = (1..=ORDER)
        .flat_map(|i| (1..=ORDER).map(move |j| (f64::from(i), f64::from(j))))
        .collect();
    DMatrix::from_fn(orders.len(), at.len(), |mode, place| {
        let (i, j) = orders[mode];
        let wave = |order: f64, x: f64| (order * std::f64::consts::PI * (x + HALF) / side).sin();
        2.0 / side / storativity.sqrt() * wave(i, at[place][0]) * wave(j, at[place][1])
    })
}

fn reduced(ground: &Ground) -> Reduced {
    let (t, s) = (
        ground.layers[0].transmissivity,
        ground.layers[0].storativity,
    );
    let rates: Vec<f64> = (1..=ORDER)
        .flat_map(|i| (1..=ORDER).map(move |j| f64::from(i * i + j * j)))
        .map(|n| t / s * n * (std::f64::consts::PI / (2.0 * HALF)).powi(2))
        .collect();
    let modes = rates.len();
    let wells: Vec<Point> = ground.wells.iter().map(|w| w.at).collect();
    let gauges: Vec<Point> = (0..ground.gauges.len())
        .map(|g| ground.gauge_at(g).unwrap().0)
        .collect();
    let neighbours: Vec<Point> = ground.neighbours.iter().map(|n| n.at).collect();
    let places = places(ground);
    let spots: Vec<Point> = places.iter().map(|p| p.0).collect();
    Reduced {
        drives: Vec::new(),
        mass: vec![ReducedBlock {
            parameter: Parameter::Storativity(0),
            matrix: DMatrix::identity(modes, modes),
        }],
        stiffness: vec![ReducedBlock {
            parameter: Parameter::Transmissivity(0),
            matrix: DMatrix::from_diagonal(&DVector::from_vec(rates)),
        }],
        wells: ports(&wells, s),
        gauges: ports(&gauges, s),
        neighbours: ports(&neighbours, s),
        places,
        place_ports: ports(&spots, s),
        closed: 0,
        patches: Vec::new(),
        certificate: Certificate {
            ports: 0.0,
            random_nodes: 0.0,
            box_corners: None,
            full_size: modes,
            modes,
            shifts: 0,
            times: (600.0, 3e7),
        },
    }
}

/// Blocks of a record; `leak` is a rate drawn from the onset on, `lost` the share of readings that are missing.
fn record(leak: f64, lost: f64, seed: u64) -> Vec<Block> {
    let ground = ground();
    let reduced = reduced(&ground);
    let factors = vec![
        (Parameter::Transmissivity(0), 1.15),
        (Parameter::Storativity(0), 0.9),
    ];
    let modal: Modal = reduced.modal(&factors).unwrap();
    let sink = {
        // The leak's port in the same modal coordinates: the pencil is diagonal, so modes only scale and reorder.
        let mut with = reduced.clone();
        with.neighbours = ports(&[LEAK_AT], ground.layers[0].storativity);
        with.modal(&factors)
            .unwrap()
            .neighbours
            .column(0)
            .into_owned()
    };
    let mut dice = Dice(seed);
    let (mut state, mut rates) = (DVector::zeros(modal.lambda.len()), vec![0.0; 2]);
    // The record begins at rest: the wells are shut in for its first hours.
    let mut left = [10usize; 2];
    let step = BLOCK / SAMPLES as f64;
    let decay = modal.lambda.map(|l| (-l * step).exp());
    let gain = modal.lambda.map(|l| -(-l * step).exp_m1() / l);
    let rest = [1.2e7, 1.1e7, 1.3e7, 1.25e7];
    let mut error = [0.0; 2];
    (0..ALL)
        .map(|index| {
            let mut sums = [0.0; 4];
            let mut pieces = vec![Vec::new(), Vec::new()];
            for sample in 0..SAMPLES {
                for (gauge, sum) in sums.iter_mut().enumerate() {
                    let mut pressure = modal.gauges.column(gauge).dot(&state) + rest[gauge];
                    if gauge == 0 {
                        pressure += rates[0] * 2.0 / (std::f64::consts::TAU * 4e-9 * 1.15);
                    }
                    *sum += pressure + 100.0 * dice.normal();
                }
                for well in 0..2 {
                    if left[well] == 0 {
                        left[well] = 60 + (dice.uniform() * 200.0) as usize;
                        rates[well] = [0.0, 0.004, 0.006, 0.008][(dice.uniform() * 4.0) as usize];
                    }
                    left[well] -= 1;
                    error[well] = 0.98 * error[well] + 0.0006 * dice.normal();
                    pieces[well].push((
                        (sample + 1) as f64 * step,
                        rates[well] * (1.0 + error[well]),
                    ));
                }
                let drawn = if index >= ONSET { leak } else { 0.0 };
                let drive = &modal.wells * DVector::from_vec(rates.clone()) - &sink * drawn;
                state = state.component_mul(&decay) + drive.component_mul(&gain);
            }
            Block {
                index: index as i64,
                length: BLOCK,
                instants: (0..SAMPLES).map(|i| i as f64 * step).collect(),
                rates: pieces
                    .into_iter()
                    .map(|pieces| RatePath {
                        pieces,
                        known: RateKnown::Read,
                    })
                    .collect(),
                gauges: sums
                    .iter()
                    .map(|sum| {
                        (dice.uniform() >= lost).then(|| GaugeBlock {
                            mean: sum / SAMPLES as f64,
                            count: SAMPLES as u32,
                            weights: vec![1.0 / SAMPLES as f64; SAMPLES],
                            changed: true,
                        })
                    })
                    .collect(),
            }
        })
        .collect()
}

fn commissioned() -> &'static Commissioned {
    static ONCE: OnceLock<Commissioned> = OnceLock::new();
    ONCE.get_or_init(|| {
        let ground = ground();
        let reduced = reduced(&ground);
        let blocks = record(0.0, 0.0, 7);
        let calibration = commission(
            &ground,
            &reduced,
            &blocks[..HISTORY],
            &CommissionSettings::default(),
            &mut |_| {},
        )
        .unwrap();
        Commissioned {
            ground,
            reduced,
            calibration,
        }
    })
}

fn settings() -> WatchSettings {
    WatchSettings {
        false_alarm_interval: 365.25 * 86_400.0,
        first_onset: HISTORY as i64,
    }
}

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
