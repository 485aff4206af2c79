//! Horizontal wells and fractures: one pressure along a line.

use borewake_model::closed_form::{e1, erfc};
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{EdgeKind, Ground, Seat};
use borewake_model::reduce::{ReduceOptions, reduce};
use borewake_model::weak_form::{Scheme, discretise};

use crate::support::{S, T, gauge, ground, well};

/// Half of the trace's length \[m\].
const HALF: f64 = 100.0;

fn fracture(trace: &[[f64; 2]]) -> Ground {
    let mut g = ground(EdgeKind::Open, 25_000.0);
    let mut w = well("H", [0.0, 0.0]);
    w.trace = trace.to_vec();
    g.wells = vec![w];
    g.gauges = vec![gauge("H", Seat::InWell(0))];
    g
}

/// Pressure of a fracture of infinite conductivity, `2 pi T p / q`, at `eta t / x_f^2`: that of one of even inflow at
/// 0.732 of its half-length (Gringarten, Ramey & Raghavan 1974, SPEJ 14; from memory).
fn gringarten(t: f64) -> f64 {
    let erf = |x: f64| 1.0 - erfc(x);
    0.5 * (std::f64::consts::PI * t).sqrt() * (erf(0.134 / t.sqrt()) + erf(0.866 / t.sqrt()))
        + 0.067 * e1(0.018 / t)
        + 0.433 * e1(0.750 / t)
}

/// The same while the tips do not yet feel each other: a strip of width `w` held at a pressure takes
/// `2 T p (w / sqrt(pi eta t) + 1)` from both its faces (Szabo, Cope, Tallman, Kovach & Wightman 1987, J. Electroanal.
/// Chem. 217; from memory), turned into the pressure under a held rate.
fn early(t: f64) -> f64 {
    std::f64::consts::PI * (1.0 - (0.25 * t).exp() * erfc(0.5 * t.sqrt()))
}

#[test]
fn a_fracture_flows_straight_at_first_and_round_at_last() {
    let system = discretise(
        &fracture(&[[-HALF, 0.0], [HALF, 0.0]]),
        Scheme::Quadratic,
        &MeshOptions::default(),
    )
    .unwrap()
    .system;
    let options = ReduceOptions {
        fastest: 10.0,
        ..ReduceOptions::default()
    };
    let reduced = reduce(&system, &[], &options).unwrap();
    println!("{} unknowns, {:?}", system.size, reduced.certificate);
    let modal = reduced.modal(&Vec::new()).unwrap();
    let own = modal.gauges.column(0);
    let eta = T / S;
    let found = |t_d: f64| {
        let t = t_d * HALF * HALF / eta;
        std::f64::consts::TAU * T * modal.step_response(own, modal.wells.column(0), t)
    };
    for t_d in [1.0, 3.0, 10.0, 100.0] {
        let share = found(t_d) / gringarten(t_d);
        assert!((share - 1.0).abs() < 0.02, "t_D {t_d}: {share}");
    }
    for t_d in [2e-3, 5e-3, 0.01, 0.03, 0.1, 0.3, 1.0] {
        let share = found(t_d) / early(t_d);
        assert!((share - 1.0).abs() < 0.01, "t_D {t_d}: {share}");
    }
    // Straight flow from both faces, with what the tips draw on top still small.
    let share = found(1e-3) / (std::f64::consts::PI * 1e-3_f64).sqrt();
    assert!((0.96..1.0).contains(&share), "{share}");
    // A quarter of its whole length stands for its radius (Prats 1961, SPEJ 1; from memory).
    for t_d in [100.0, 1000.0_f64] {
        let exact = 0.5 * e1(0.25 * 0.25 / t_d);
        assert!(
            (found(t_d) / exact - 1.0).abs() < 2e-3,
            "{t_d}: {}",
            found(t_d) / exact
        );
    }
}

#[test]
fn a_trace_may_bend_and_lies_inside_the_edge_apart_from_others() {
    let options = MeshOptions::default();
    let bent = fracture(&[[-HALF, 0.0], [0.0, 30.0], [HALF, -40.0]]);
    let mesh = discretise(&bent, Scheme::Quadratic, &options).unwrap().mesh;
    mesh.check().unwrap();
    let said = |g: &Ground| match discretise(g, Scheme::Quadratic, &options) {
        Err(why) => why.to_string(),
        Ok(_) => String::new(),
    };
    let mut far = bent.clone();
    far.wells[0].trace.push([24_900.0, 0.0]);
    assert!(said(&far).contains("well H lies outside the edge; give the edge a distance above"));
    let mut crossed = bent.clone();
    let mut other = crossed.wells[0].clone();
    (other.name, other.trace) = ("K".into(), vec![[-50.0, -60.0], [-50.0, 60.0]]);
    crossed.wells.push(other);
    assert!(
        said(&crossed).contains("the trace of well H and the trace of well K meet in one layer")
    );
    let mut flat = bent;
    flat.wells[0].trace = vec![[3.0, 4.0], [3.0, 4.0]];
    assert!(said(&flat).contains("the trace of well H has no length; give it two corners"));
}
