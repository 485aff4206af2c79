//! The reduced against the full system, on a small lattice whose dense eigenproblem is at hand.

use nalgebra::{DMatrix, DVector, SymmetricEigen};

use super::lattice::{Ends, Lattice};
use super::*;

const DAY: f64 = 86_400.0;

fn options() -> ReduceOptions {
    ReduceOptions {
        checked_times: 6,
        ..ReduceOptions::default()
    }
}

/// The full system, diagonalised densely: the truth.
fn truth(system: &System, factors: &Factors, functionals: &[&Functional]) -> Modal {
    let n = system.size;
    let factor = |p| {
        factors
            .iter()
            .find(|f| f.0 == p)
            .map_or(1.0, |f: &(Parameter, f64)| f.1)
    };
    let (mut mass, mut stiffness) = (DVector::<f64>::zeros(n), DMatrix::<f64>::zeros(n, n));
    for block in &system.mass {
        for t in block.matrix.as_ref().triplet_iter() {
            assert_eq!(t.row, t.col);
            mass[t.row] += factor(block.parameter) * t.val;
        }
    }
    for block in &system.stiffness {
        for t in block.matrix.as_ref().triplet_iter() {
            stiffness[(t.row, t.col)] += factor(block.parameter) * t.val;
        }
    }
    let root = mass.map(f64::sqrt);
    for i in 0..n {
        for j in 0..n {
            stiffness[(i, j)] /= root[i] * root[j];
        }
    }
    let eigen = SymmetricEigen::new(stiffness);
    let mut b = DMatrix::zeros(n, functionals.len());
    for (j, f) in functionals.iter().enumerate() {
        for &(node, w) in &f.0 {
            b[(node, j)] += w / root[node];
        }
    }
    let ports = eigen.eigenvectors.tr_mul(&b);
    let empty = DMatrix::zeros(n, 0);
    Modal {
        lambda: eigen.eigenvalues.map(|l| l.max(0.0)),
        wells: ports,
        gauges: empty.clone(),
        neighbours: empty.clone(),
        places: empty,
    }
}

/// Largest error of any response between the listed functionals over log-spaced times, as a share of its own peak.
fn largest_error(
    full: &DMatrix<f64>,
    full_modal: &Modal,
    reduced: &Modal,
    ports: &DMatrix<f64>,
) -> f64 {
    let mut worst = 0.0_f64;
    for i in 0..full.ncols() {
        for j in 0..full.ncols() {
            let (mut error, mut peak) = (0.0_f64, 0.0_f64);
            for k in 0..40 {
                let t = 60.0 * (365.25 * DAY / 60.0_f64).powf(f64::from(k) / 39.0);
                let a = full_modal.step_response(full.column(i), full.column(j), t);
                let b = reduced.step_response(ports.column(i), ports.column(j), t);
                error = error.max((a - b).abs());
                peak = peak.max(a.abs());
            }
            worst = worst.max(error / peak);
        }
    }
    worst
}

fn all_ports(modal: &Modal) -> DMatrix<f64> {
    let columns: Vec<DVector<f64>> = [&modal.wells, &modal.gauges, &modal.neighbours]
        .iter()
        .flat_map(|m| m.column_iter().map(|c| c.into_owned()))
        .collect();
    DMatrix::from_columns(&columns)
}

fn all_functionals(system: &System) -> Vec<&Functional> {
    system
        .wells
        .iter()
        .chain(&system.gauges)
        .chain(&system.neighbours)
        .collect()
}

#[test]
fn the_tolerance_is_kept_on_far_fewer_modes_than_nodes() {
    let lattice = Lattice::new(14, Ends::Open);
    let reduced = reduce(&lattice.system, &[], &options()).unwrap();
    let modal = reduced.modal(&vec![]).unwrap();
    let full = truth(&lattice.system, &vec![], &all_functionals(&lattice.system));
    let error = largest_error(&full.wells, &full, &modal, &all_ports(&modal));
    let said = &reduced.certificate;
    assert!(error < 1e-6 && said.ports < 1e-6, "{error:e} {said:?}");
    assert!(said.random_nodes < 1e-4, "{said:?}");
    assert!(said.modes < lattice.system.size / 8, "{said:?}");
    assert!(modal.lambda.iter().all(|&l| l > 0.0));
}

#[test]
fn the_certificate_says_what_a_comparison_with_the_dense_truth_finds() {
    let lattice = Lattice::new(14, Ends::Open);
    for (tolerance, max_shifts) in [(1e-1, 4), (1e-2, 8)] {
        let coarse = ReduceOptions {
            tolerance,
            max_shifts,
            log_range: 0.0,
            checked_times: 20,
            ..options()
        };
        let reduced = reduce(&lattice.system, &[], &coarse).unwrap();
        let modal = reduced.modal(&vec![]).unwrap();
        let full = truth(&lattice.system, &vec![], &all_functionals(&lattice.system));
        let error = largest_error(&full.wells, &full, &modal, &all_ports(&modal));
        let said = reduced.certificate.ports;
        assert!((0.7..1.4).contains(&(said / error)), "{error:e} {said:e}");
    }
}

#[test]
fn a_closed_ground_and_sealed_compartments_keep_every_drop() {
    for ends in [Ends::Closed, Ends::Compartments] {
        let lattice = Lattice::new(10, ends);
        let system = &lattice.system;
        let reduced = reduce(system, &[], &options()).unwrap();
        let modal = reduced.modal(&vec![]).unwrap();
        let components = system.closed_components.len();
        assert_eq!(reduced.closed, components);
        for k in 0..modal.modes() {
            assert_eq!(modal.lambda[k] == 0.0, k < components);
        }
        // Volume injected over total storage is the mean pressure, however long and whatever the modes do: the mean is
        // the share of the closed components' own modes.
        let t = 3.0e9;
        for (w, well) in system.wells.iter().enumerate() {
            let node = well.0[0].0;
            for (c, component) in system.closed_components.iter().enumerate() {
                let storage = lattice.storage(component);
                let here = component.contains(&node);
                let mean = modal.wells[(c, w)] * t / storage.sqrt();
                let expected = if here { t / storage } else { 0.0 };
                assert!(
                    (mean - expected).abs() <= 1e-12 * t / storage,
                    "{mean} {expected}"
                );
            }
        }
        // After long times every place of a compartment rises alike, and the other compartment not at all.
        let (first, last) = (modal.gauges.column(0), modal.gauges.column(3));
        let slope = |c, t: f64| {
            (modal.step_response(c, modal.wells.column(0), 2.0 * t)
                - modal.step_response(c, modal.wells.column(0), t))
                / t
        };
        let storage = lattice.storage(&system.closed_components[0]);
        assert!((slope(first, 1e12) * storage - 1.0).abs() < 1e-9);
        let far = if ends == Ends::Closed { 1.0 } else { 0.0 };
        assert!((slope(last, 1e12) * storage - far).abs() < 1e-9);
    }
}

#[test]
fn exchanging_source_and_gauge_changes_nothing_and_places_are_ports_like_any_other() {
    let lattice = Lattice::new(10, Ends::Open);
    let system = &lattice.system;
    // Well 0, gauge 2 and the neighbour again, as places.
    let places: Vec<_> = [&system.wells[0], &system.gauges[2], &system.neighbours[0]]
        .into_iter()
        .map(|f| (system.nodes[f.0[0].0].0, 0, f.clone()))
        .collect();
    let modal = reduce(system, &places, &options())
        .unwrap()
        .modal(&vec![])
        .unwrap();
    assert_eq!(modal.places.column(0), modal.wells.column(0));
    assert_eq!(modal.places.column(1), modal.gauges.column(2));
    assert_eq!(modal.places.column(2), modal.neighbours.column(0));
    assert_eq!(modal.wells.column(1), modal.gauges.column(1));
    for t in [60.0, 3600.0, DAY, 100.0 * DAY] {
        let there = modal.step_response(modal.gauges.column(3), modal.wells.column(0), t);
        let back = modal.step_response(modal.wells.column(0), modal.gauges.column(3), t);
        assert_eq!(there, back);
        // Passivity: a well's own pressure rises with its rate.
        assert!(modal.step_response(modal.wells.column(1), modal.wells.column(1), t) > 0.0);
    }
}

#[test]
fn alike_factors_on_all_conduction_and_all_storage_only_stretch_time() {
    let lattice = Lattice::new(10, Ends::Open);
    let reduced = reduce(&lattice.system, &[], &options()).unwrap();
    let (a, b) = (1.7, 0.6);
    let mut factors: Factors = Vec::new();
    factors.extend(lattice.system.stiffness.iter().map(|s| (s.parameter, a)));
    factors.extend(lattice.system.mass.iter().map(|s| (s.parameter, b)));
    let (before, after) = (
        reduced.modal(&vec![]).unwrap(),
        reduced.modal(&factors).unwrap(),
    );
    let largest = after.lambda.max();
    for (l, m) in before.lambda.iter().zip(after.lambda.iter()) {
        assert!((l * a / b - m).abs() <= 1e-12 * largest);
    }
    for t in [60.0, 3600.0, DAY, 100.0 * DAY] {
        let y = |m: &Modal, t| m.step_response(m.gauges.column(2), m.wells.column(0), t);
        let peak = y(&after, 300.0 * DAY);
        let (stretched, new) = (y(&before, t * a / b) / a, y(&after, t));
        assert!((stretched - new).abs() <= 1e-9 * peak);
    }
}

#[test]
fn other_parameters_need_no_new_reduction() {
    let lattice = Lattice::new(14, Ends::Open);
    let corners = ReduceOptions {
        corners: Some(BoxCorners {
            log_transmissivity: 0.5,
            log_storativity: 0.5,
        }),
        ..options()
    };
    let reduced = reduce(&lattice.system, &[], &corners).unwrap();
    let said = reduced.certificate.box_corners.unwrap();
    assert!(said > 0.0 && said < 3e-4, "{said:e}");
    let factors: Factors = vec![
        (Parameter::Transmissivity(0), 0.5_f64.exp()),
        (Parameter::Storativity(0), (-0.5_f64).exp()),
        (Parameter::Barrier(0), 0.5),
        (Parameter::Skin(1), 2.0),
    ];
    let modal = reduced.modal(&factors).unwrap();
    let full = truth(&lattice.system, &factors, &all_functionals(&lattice.system));
    let error = largest_error(&full.wells, &full, &modal, &all_ports(&modal));
    assert!(error < 1e-5, "{error:e}");
}

#[test]
fn twice_the_same_is_equal_to_the_bit() {
    let lattice = Lattice::new(8, Ends::Closed);
    let once = reduce(&lattice.system, &[], &options()).unwrap();
    let again = reduce(&lattice.system, &[], &options()).unwrap();
    assert_eq!(once, again);
    let factors = vec![(Parameter::Transmissivity(0), 1.3)];
    assert_eq!(once.modal(&factors), again.modal(&factors));
}

#[test]
fn a_stepped_block_agrees_with_small_implicit_steps_of_the_full_system() {
    use crate::block::{RateKnown, RatePath};
    let lattice = Lattice::new(10, Ends::Open);
    let modal = reduce(&lattice.system, &[], &options())
        .unwrap()
        .modal(&vec![])
        .unwrap();
    let full = truth(&lattice.system, &vec![], &all_functionals(&lattice.system));
    let (q1, q2) = (3e-3, -1e-3);
    let path = |pieces: &[(f64, f64)]| RatePath {
        pieces: pieces.to_vec(),
        known: RateKnown::Read,
    };
    let rates = [path(&[(900.0, q1), (3600.0, q2)]), path(&[(3600.0, q1)])];
    let mut x = DVector::zeros(modal.modes());
    let mut out = DMatrix::zeros(4, 3);
    Propagator::new(&modal)
        .advance(&mut x, &rates, 3600.0, &[600.0, 1800.0, 3600.0], &mut out)
        .unwrap();
    // Crank-Nicolson in the modes of the full system, after a few implicit Euler steps that damp the start.
    let mut z = DVector::<f64>::zeros(full.modes());
    let (dt, mut seen) = (0.5, Vec::new());
    for n in 0..7200 {
        let t = f64::from(n) * dt;
        let u1 = if t < 900.0 { q1 } else { q2 };
        let theta = if n < 4 || (1800..1804).contains(&n) {
            1.0
        } else {
            0.5
        };
        for k in 0..z.len() {
            let f = full.wells[(k, 0)] * u1 + full.wells[(k, 1)] * q1;
            let l = full.lambda[k];
            z[k] = (z[k] * (1.0 - (1.0 - theta) * l * dt) + f * dt) / (1.0 + theta * l * dt);
        }
        if [1199, 3599, 7199].contains(&n) {
            seen.push(full.wells.columns(2, 4).tr_mul(&z));
        }
    }
    for (k, seen) in seen.iter().enumerate() {
        for g in 0..4 {
            let scale = seen.amax();
            assert!(
                (out[(g, k)] - seen[g]).abs() < 1e-4 * scale,
                "{} {}",
                out[(g, k)],
                seen[g]
            );
        }
    }
}

#[test]
fn what_does_not_fit_is_an_error_that_says_so() {
    let lattice = Lattice::new(7, Ends::Open);
    let mut system = lattice.system.clone();
    system.gauges[0] = Functional(vec![(system.size, 1.0)]);
    assert!(matches!(
        reduce(&system, &[], &options()),
        Err(ModelError::Size { .. })
    ));
    let wrong = ReduceOptions {
        slowest: 1.0,
        ..options()
    };
    assert!(matches!(
        reduce(&lattice.system, &[], &wrong),
        Err(ModelError::Parameter { .. })
    ));
    let reduced = reduce(&lattice.system, &[], &options()).unwrap();
    assert!(matches!(
        reduced.modal(&vec![(Parameter::Storativity(0), -1.0)]),
        Err(ModelError::Parameter { .. })
    ));
    assert!(matches!(
        reduced.modal(&vec![
            (Parameter::Storativity(0), 0.0),
            (Parameter::Storage(1), 0.0)
        ]),
        Err(ModelError::NotPositive { .. })
    ));
}
