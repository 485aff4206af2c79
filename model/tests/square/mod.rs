//! A small invented site whose modes are known in closed form, and records of it.
//!
//! The ground is a square with its edge held, so its modes are products of sines. Truth is stepped with the same
//! modes at other parameters.
#![allow(
    dead_code,
    unreachable_pub,
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_possible_wrap,
    clippy::cast_sign_loss,
    reason = "each test file uses its own share of this one, and a test that meets the unexpected should stop there"
)]

use std::sync::OnceLock;

use borewake_model::block::{Block, GaugeBlock, RateKnown, RatePath};
use borewake_model::commission::{CommissionSettings, Commissioned, commission, places};
use borewake_model::ground::{Edge, EdgeKind, Gauge, Ground, Layer, Neighbour, Point, Seat, Well};
use borewake_model::reduce::{Certificate, Modal, Reduced, ReducedBlock};
use borewake_model::watch::WatchSettings;
use borewake_model::weak_form::Parameter;
use nalgebra::{DMatrix, DVector};

pub const BLOCK: f64 = 10_800.0;
pub const SAMPLES: usize = 6;
pub const HISTORY: usize = 240;
pub const ALL: usize = 480;
pub const ONSET: usize = 320;
pub const HALF: f64 = 4_000.0;
pub const ORDER: u32 = 13;
pub const LEAK_AT: Point = [150.0, -250.0];

/// A repeatable source of normal deviates (xorshift, Marsaglia 2003; Box & Muller 1958).
pub struct Dice(pub u64);

impl Dice {
    pub fn uniform(&mut self) -> f64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        ((self.0 >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    }

    pub fn normal(&mut self) -> f64 {
        (-2.0 * self.uniform().ln()).sqrt() * (std::f64::consts::TAU * self.uniform()).cos()
    }
}

pub fn ground() -> Ground {
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

pub fn ports(at: &[Point], storativity: f64) -> DMatrix<f64> {
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

pub fn reduced(ground: &Ground) -> Reduced {
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
            leaks: 0.0,
            box_corners: None,
            full_size: modes,
            modes,
            shifts: 0,
            times: (600.0, 3e7),
        },
    }
}

/// Blocks of a record; `leak` is a rate drawn from the onset on, `lost` the share of readings that are missing.
pub fn record(leak: f64, lost: f64, seed: u64) -> Vec<Block> {
    leaking_record(leak, lost, seed, 0.0)
}

/// The same where the whole layer leaks to a bed at rest, `seeping` \[1/s\] of what it stores.
pub fn leaking_record(leak: f64, lost: f64, seed: u64, seeping: f64) -> Vec<Block> {
    let ground = ground();
    let reduced = reduced(&ground);
    let factors = vec![
        (Parameter::Transmissivity(0), 1.15),
        (Parameter::Storativity(0), 0.9),
    ];
    let mut modal: Modal = reduced.modal(&factors).unwrap();
    modal.lambda.add_scalar_mut(seeping);
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

pub fn commissioned() -> &'static Commissioned {
    static ONCE: OnceLock<Commissioned> = OnceLock::new();
    ONCE.get_or_init(|| {
        let ground = ground();
        let reduced = reduced(&ground);
        let blocks = record(0.0, 0.0, 7);
        let (calibration, _) = commission(
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
            numerics: None,
        }
    })
}

pub fn settings() -> WatchSettings {
    WatchSettings {
        false_alarm_interval: 365.25 * 86_400.0,
        first_onset: HISTORY as i64,
    }
}
