//! A watch beside a river: what the river does is expected, what a leak does is not.

use borewake_model::block::{Block, GaugeBlock, RateKnown, RatePath};
use borewake_model::commission::{CommissionSettings, Commissioned, Places, commission};
use borewake_model::finding::{Cause, Finding};
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{EdgeKind, Ground, Patches, Seat, Stage};
use borewake_model::reduce::{Modal, ReduceOptions, Reduced, reduce_patched};
use borewake_model::watch::{Watch, WatchSettings};
use borewake_model::weak_form::{Parameter, Scheme, discretise};
use nalgebra::DVector;

use crate::support::{gauge, ground, in_ground, well};

const BLOCK: f64 = 10_800.0;
const SAMPLES: usize = 6;
const HISTORY: usize = 240;
const ALL: usize = 480;
const ONSET: usize = 330;

/// One well, three gauges apart, and a river to the east; invented.
fn site() -> Ground {
    let mut g = ground(EdgeKind::Open, 12_000.0);
    g.wells = vec![well("W", [0.0, 0.0])];
    g.gauges = vec![
        gauge("W", Seat::InWell(0)),
        gauge("O-1", in_ground([450.0, 150.0])),
        gauge("O-2", in_ground([-250.0, -350.0])),
        gauge("O-3", in_ground([150.0, 420.0])),
    ];
    g.stages = vec![Stage {
        name: "river".into(),
        line: vec![[800.0, -13_000.0], [700.0, 0.0], [900.0, 13_000.0]],
        layer: 0,
        conductance: 3e-11,
    }];
    g
}

fn reduced(g: &Ground, places: &Places) -> Reduced {
    let coarse = MeshOptions {
        points_per_ring: 8,
        refine: 1.0,
    };
    let discrete = discretise(g, Scheme::Quadratic, &coarse).unwrap();
    let at: Vec<_> = places
        .all
        .iter()
        .map(|&(p, l)| (p, l, discrete.locate(p, l).unwrap()))
        .collect();
    let (centre, half_width) = (places.centre, places.half_width);
    let patches = Patches { centre, half_width };
    let shares = discrete.patches(g, &patches).unwrap();
    let options = ReduceOptions {
        checked_times: 2,
        checked_nodes: 2,
        ..ReduceOptions::default()
    };
    reduce_patched(&discrete.system, &shares, &at, &options).unwrap()
}

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

/// A record of a well that changes its rate and a river that tides and wanders about 50 kPa, and floods after
/// commissioning; `leak` is drawn at `place` from the onset on.
fn record(modal: &Modal, leak: f64, place: usize) -> Vec<Block> {
    let mut dice = Dice(5);
    let step = BLOCK / SAMPLES as f64;
    let decay = modal.lambda.map(|l| (-l * step).exp());
    let gain = modal.lambda.map(|l| -(-l * step).exp_m1() / l);
    let mut state = DVector::zeros(modal.modes());
    let (mut rate, mut left, mut wander) = (0.0, 20, 0.0);
    (0..ALL)
        .map(|index| {
            let mut sums = [0.0; 4];
            let (mut rates, mut levels) = (Vec::new(), Vec::new());
            for sample in 0..SAMPLES {
                for (g, sum) in sums.iter_mut().enumerate() {
                    *sum += modal.gauges.column(g).dot(&state) + 2e5 + 100.0 * dice.normal();
                }
                if left == 0 {
                    left = 60 + (dice.uniform() * 200.0) as usize;
                    rate = [0.0, 0.002, 0.003, 0.005][(dice.uniform() * 4.0) as usize];
                }
                left -= 1;
                let time = (index * SAMPLES + sample) as f64 * step / 86_400.0;
                wander = 0.995 * wander + 600.0 * dice.normal();
                let flood = 25e3 * (-((time - 46.0) / 4.0).powi(2)).exp();
                let level = wander + 3e3 * (std::f64::consts::TAU * time * 1.93).sin() + flood;
                let until = (sample + 1) as f64 * step;
                rates.push((until, rate));
                levels.push((until, 5e4 + level));
                let drawn = if index >= ONSET { leak } else { 0.0 };
                let drive = &modal.wells * DVector::from_vec(vec![rate, level])
                    - modal.places.column(place) * drawn;
                state = state.component_mul(&decay) + drive.component_mul(&gain);
            }
            let path = |pieces| RatePath {
                pieces,
                known: RateKnown::Read,
            };
            Block {
                index: index as i64,
                length: BLOCK,
                instants: (0..SAMPLES).map(|i| i as f64 * step).collect(),
                rates: vec![path(rates), path(levels)],
                gauges: sums
                    .iter()
                    .map(|sum| {
                        Some(GaugeBlock {
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

fn findings(commissioned: &Commissioned, blocks: &[Block]) -> Vec<Finding> {
    let settings = WatchSettings {
        false_alarm_interval: 365.25 * 86_400.0,
        first_onset: HISTORY as i64,
    };
    let mut watch = Watch::new(commissioned, &settings, &[]).unwrap();
    blocks
        .iter()
        .filter_map(|b| watch.step(b).unwrap().finding)
        .collect()
}

#[test]
fn a_flood_raises_no_alarm_and_a_leak_beside_the_river_does() {
    let g = site();
    let places = Places::of(&g);
    let reduced = reduced(&g, &places);
    let truth = vec![
        (Parameter::Transmissivity(0), 1.1),
        (Parameter::Storativity(0), 0.9),
        (Parameter::Stage(0), 0.8),
    ];
    let modal = reduced.modal(&truth).unwrap();
    let quiet = record(&modal, 0.0, 0);
    let settings = CommissionSettings::default();
    let (calibration, _) =
        commission(&g, &reduced, &quiet[..HISTORY], &settings, &mut |_| {}).unwrap();
    for (parameter, true_factor) in &truth {
        let (at, (_, found)) = calibration
            .factors
            .iter()
            .enumerate()
            .find(|(_, (p, _))| p == parameter)
            .unwrap();
        let sd = calibration.factor_sd[at];
        println!("{parameter:?}: {found:.3} of {true_factor}, sd {sd:.3}");
        assert!((found / true_factor).ln().abs() < (4.0 * sd).max(0.03));
        assert!(sd < 0.2, "history tells little of {parameter:?}: {sd}");
    }
    let rest = &calibration.priors.rest;
    assert!(rest[0] == 0.0 && (rest[1] - 5e4).abs() < 1e4, "{rest:?}");
    let commissioned = Commissioned::new(g, &reduced, calibration).unwrap();
    let told = findings(&commissioned, &quiet);
    assert!(told.is_empty(), "{:?}", told.first());

    let near = places
        .all
        .iter()
        .take(places.candidates)
        .position(|(p, _)| (p[0] - 250.0).hypot(p[1] - 200.0) < 60.0)
        .unwrap();
    let leaking = record(&modal, 3e-4, near);
    let told = findings(&commissioned, &leaking);
    let last = told.last().expect("the leak is found");
    assert_eq!(last.causes[0].cause, Cause::Leak, "{:?}", last.causes);
    assert!((last.onset / BLOCK - ONSET as f64).abs() < 8.0);
}
