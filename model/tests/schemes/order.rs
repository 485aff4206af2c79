//! Orders of convergence in space, measured against the line source at every node.

use std::f64::consts::PI;

use borewake_model::closed_form::{k0, k1};
use borewake_model::ground::EdgeKind;
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::weak_form::{Discrete, Scheme, discretise};

use crate::support::{S, T, gauge, ground, in_ground, transfer, well};

/// Pressure reaches some 270 m at this rate of change \[1/s\].
const RATE: f64 = 1e-5;

/// One well in a ground whose edge is out of its reach.
fn one_well(scheme: Scheme, points: usize) -> Discrete {
    let mut g = ground(EdgeKind::Open, 4000.0);
    g.wells = vec![well("W", [0.0, 0.0])];
    // A lattice takes its finest spacing from the extent of wells and gauges.
    if scheme == Scheme::FiniteDifference {
        g.gauges = vec![gauge("G", in_ground([300.0, 300.0]))];
    }
    let options = MeshOptions {
        points_per_ring: points,
        refine: 1.0,
    };
    discretise(&g, scheme, &options).unwrap()
}

/// Root of the mean square error at the nodes within a range of distances, as a share of the value at the nearest of them.
fn error(scheme: Scheme, points: usize) -> f64 {
    // A lattice's well is a point, so its neighbourhood is left out.
    let (near, well_radius) = match scheme {
        Scheme::FiniteDifference => (60.0, 0.0),
        _ => (5.0, 0.11),
    };
    let d = one_well(scheme, points);
    let x = transfer(&d.system, RATE, &d.system.wells);
    let root = (RATE * S / T).sqrt();
    let factor = if well_radius > 0.0 {
        well_radius * root * k1(well_radius * root)
    } else {
        1.0
    };
    let (mut sum, mut count) = (0.0, 0.0);
    for (i, (p, _)) in d.system.nodes.iter().enumerate() {
        let r = p[0].hypot(p[1]);
        if (near..1000.0).contains(&r) {
            sum += (2.0 * PI * T * x[(i, 0)] - k0(r * root) / factor).powi(2);
            count += 1.0;
        }
    }
    f64::sqrt(sum / count) / k0(near * root)
}

fn order(scheme: Scheme, coarse: usize, fine: usize) -> f64 {
    let (a, b) = (error(scheme, coarse), error(scheme, fine));
    let found = (a / b).ln() / (fine as f64 / coarse as f64).ln();
    println!(
        "{scheme:?}: {a:.2e} with {coarse} points on a ring, {b:.2e} with {fine}: order {found:.2}"
    );
    found
}

#[test]
fn linear_elements_and_volumes_are_of_second_order() {
    for scheme in [
        Scheme::LinearConsistent,
        Scheme::LinearLumped,
        Scheme::FiniteVolume,
    ] {
        assert!(order(scheme, 12, 36) >= 1.9, "{scheme:?}");
    }
}

#[test]
fn differences_are_of_second_order() {
    assert!(order(Scheme::FiniteDifference, 12, 36) >= 1.9);
}

#[test]
fn quadratic_elements_are_of_third_order_or_better() {
    assert!(order(Scheme::Quadratic, 10, 24) >= 2.8);
}
