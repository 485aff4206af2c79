//! Open water beside the ground: a straight bank (Carslaw & Jaeger 1959; Ferris 1952 for a tide; both from memory) and
//! an edge that follows a level.

use borewake_model::closed_form::erfc;
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{EdgeKind, Ground, Seat, Stage};
use borewake_model::reduce::{Modal, ReduceOptions, reduce};
use borewake_model::weak_form::{Parameter, Scheme, discretise};
use nalgebra::Complex;

use crate::support::{S, T, gauge, ground, in_ground, transfer, value, well};

const ETA: f64 = T / S;
/// Distances of the gauges from the bank \[m\]; on either side of it nothing differs.
const AWAY: [f64; 4] = [80.0, 250.0, -250.0, 900.0];

/// A river through the whole ground along x = 0.
fn river(conductance: f64) -> Ground {
    let mut g = ground(EdgeKind::Open, 25_000.0);
    g.stages = vec![Stage {
        name: "river".into(),
        line: vec![[0.0, -30_000.0], [0.0, 30_000.0]],
        layer: 0,
        conductance,
    }];
    g.wells = vec![well("W", [400.0, 300.0])];
    g.gauges = vec![gauge("W", Seat::InWell(0))];
    for (i, x) in AWAY.into_iter().enumerate() {
        g.gauges
            .push(gauge(&format!("O-{i}"), in_ground([x, 20.0 * i as f64])));
    }
    g
}

/// Pressure beside a bank over that of the water, as transforms: through the bed, then into both sides.
fn beside(x: f64, conductance: f64, s: Complex<f64>) -> Complex<f64> {
    let entry = (s * T * S).sqrt() * 2.0 / conductance + 1.0;
    (-(s / ETA).sqrt() * x.abs()).exp() / entry
}

fn modal_of(g: &Ground) -> (Modal, borewake_model::reduce::Reduced) {
    let system = discretise(g, Scheme::Quadratic, &MeshOptions::default())
        .unwrap()
        .system;
    let reduced = reduce(&system, &[], &ReduceOptions::default()).unwrap();
    println!("{:?}", reduced.certificate);
    (reduced.modal(&Vec::new()).unwrap(), reduced)
}

#[test]
fn a_bank_answers_a_step_and_a_tide_as_the_closed_form_says() {
    // So open a bed shields the far bank from the well: what little passes is not kept to a share of its own peak, so the
    // certificate is no measure of what is tested here.
    let g = river(1e-6);
    let (modal, _) = modal_of(&g);
    let port = modal.wells.column(1);
    // The well's own gauge feels the river like any other.
    for (i, x) in [400.0].into_iter().chain(AWAY).enumerate() {
        let seen = modal.gauges.column(i);
        for t in [1_800.0, 7_200.0, 86_400.0, 6e5, 5e6] {
            let exact = erfc(x.abs() / (2.0 * f64::sqrt(ETA * t)));
            let found = modal.step_response(seen, port, t);
            assert!((found - exact).abs() < 2e-3, "x {x} t {t}: {found} {exact}");
        }
        for period in [43_200.0, 86_400.0, 1.2e6] {
            let s = Complex::new(0.0, std::f64::consts::TAU / period);
            let found: Complex<f64> = (0..modal.modes())
                .map(|k| (s + modal.lambda[k]).inv() * (seen[k] * port[k]))
                .sum();
            let amplitude = (-x.abs() * (std::f64::consts::PI / (ETA * period)).sqrt()).exp();
            assert!(
                (found.norm() - amplitude).abs() < 2e-3,
                "x {x} period {period}"
            );
            assert!(
                (found - beside(x, 1e-6, s)).norm() < 2e-3,
                "x {x} period {period}"
            );
        }
    }
}

#[test]
fn a_bed_of_any_conductance_lets_in_its_share_and_may_change() {
    for conductance in [1e-11, 1e-10, 1e-8] {
        let g = river(conductance);
        let system = discretise(&g, Scheme::Quadratic, &MeshOptions::default())
            .unwrap()
            .system;
        for s in [1e-6, 1e-5, 1e-4] {
            let x = transfer(&system, s, &system.wells);
            for (i, away) in AWAY.into_iter().enumerate() {
                let found = value(&system.gauges[i + 1], &x, 1);
                let exact = beside(away, conductance, Complex::new(s, 0.0)).re;
                assert!(
                    (found - exact).abs()
                        < 1e-3 * beside(0.0, conductance, Complex::new(s, 0.0)).re,
                    "c {conductance:e} s {s:e} x {away}: {found} {exact}"
                );
            }
        }
    }
    // A bed twice as tight is a parameter like any other, and changes what it lets in with what it lets out.
    let (_, reduced) = modal_of(&river(1e-10));
    let tight = reduced.modal(&vec![(Parameter::Stage(0), 0.5)]).unwrap();
    let (anew, _) = modal_of(&river(5e-11));
    for (i, _) in AWAY.iter().enumerate() {
        for t in [86_400.0, 2e6] {
            let at = |m: &Modal| m.step_response(m.gauges.column(i + 1), m.wells.column(1), t);
            assert!((at(&tight) - at(&anew)).abs() < 1e-3 * at(&anew).max(0.1));
        }
    }
}

#[test]
fn an_edge_follows_its_level() {
    const RADIUS: f64 = 2_000.0;
    let mut g = ground(EdgeKind::Driven, RADIUS);
    g.gauges = vec![
        gauge("middle", in_ground([0.0, 0.0])),
        gauge("east", in_ground([600.0, 0.0])),
        gauge("west", in_ground([-600.0, 0.0])),
    ];
    assert_eq!(g.inputs(), 1);
    let system = discretise(&g, Scheme::Quadratic, &MeshOptions::default())
        .unwrap()
        .system;
    // Held at the rim of a circle: I0(r z) / I0(R z) with z the root of s / eta.
    let i0 = |z: f64| {
        let (mut term, mut sum, mut k) = (1.0, 1.0, 1.0);
        while term > 1e-17 * sum {
            term *= (0.5 * z / k).powi(2);
            sum += term;
            k += 1.0;
        }
        sum
    };
    let reduced = reduce(&system, &[], &ReduceOptions::default()).unwrap();
    println!("{:?}", reduced.certificate);
    let modal = reduced.modal(&Vec::new()).unwrap();
    for s in [1e-13_f64, 1e-7, 1e-6, 3e-6] {
        let x = transfer(&system, s, &system.wells);
        let z = (s / ETA).sqrt();
        for (i, r) in [0.0, 600.0, 600.0].into_iter().enumerate() {
            let exact = i0(r * z) / i0(RADIUS * z);
            let found = value(&system.gauges[i], &x, 0);
            let (seen, port) = (modal.gauges.column(i), modal.wells.column(0));
            let kept: f64 = (0..modal.modes())
                .map(|k| seen[k] * port[k] / (s + modal.lambda[k]))
                .sum();
            assert!((kept - found).abs() < 1e-3, "s {s:e} r {r}: {kept} {found}");
            // The outline has corners, within half a percent of the circle.
            assert!(
                (found - exact).abs() < 0.01,
                "s {s:e} r {r}: {found} {exact}"
            );
        }
    }
}
