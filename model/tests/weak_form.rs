//! Identities that every scheme must keep.

#![allow(
    clippy::indexing_slicing,
    clippy::panic,
    clippy::unwrap_used,
    reason = "tests may fail loudly"
)]

mod support;

use std::f64::consts::PI;

use borewake_model::ModelError;
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{Barrier, EdgeKind, Ground, Layer, Point};
use borewake_model::weak_form::{
    Discrete, Parameter, Scheme, SparseBlock, discretise, discretise_on,
};
use support::{S, T, gauge, ground, in_ground, layer, three_wells, well};

const SCHEMES: [Scheme; 4] = [
    Scheme::Quadratic,
    Scheme::LinearConsistent,
    Scheme::LinearLumped,
    Scheme::FiniteVolume,
];

fn coarse() -> MeshOptions {
    MeshOptions {
        points_per_ring: 10,
        refine: 1.0,
    }
}

fn barrier(line: &[Point], conductance: f64) -> Barrier {
    Barrier {
        name: "fault".into(),
        line: line.to_vec(),
        conductance,
    }
}

/// A ground with everything in it: two layers, a barrier, a well with storage and skin.
fn full() -> Ground {
    let mut g = three_wells();
    g.layers = vec![
        Layer {
            leakance_below: Some(2e-17),
            ..layer()
        },
        Layer {
            name: "lower".into(),
            ..layer()
        },
    ];
    g.barriers = vec![barrier(&[[1400.0, -2000.0], [1600.0, 2500.0]], 1e-12)];
    g.wells[1].layer = 1;
    g.wells[2].skin = 3.0;
    g.wells[2].storage = 2e-7;
    g
}

fn block(blocks: &[SparseBlock], parameter: Parameter) -> &SparseBlock {
    blocks.iter().find(|b| b.parameter == parameter).unwrap()
}

fn apply(block: &SparseBlock, x: &[f64]) -> Vec<f64> {
    let mut y = vec![0.0; x.len()];
    for t in block.matrix.triplet_iter() {
        y[t.row] += *t.val * x[t.col];
    }
    y
}

/// Triplets in order, for comparison bit by bit.
fn bits(block: &SparseBlock) -> Vec<(usize, usize, u64)> {
    block
        .matrix
        .triplet_iter()
        .map(|t| (t.row, t.col, t.val.to_bits()))
        .collect()
}

#[test]
fn matrices_are_symmetric_to_the_bit_and_nowhere_negative() {
    for scheme in SCHEMES {
        let d = discretise(&full(), scheme, &coarse()).unwrap();
        for b in d.system.mass.iter().chain(&d.system.stiffness) {
            let mut across: Vec<_> = bits(b).into_iter().map(|(i, j, v)| (j, i, v)).collect();
            across.sort_unstable();
            let mut along = bits(b);
            along.sort_unstable();
            assert_eq!(along, across, "{scheme:?} {:?}", b.parameter);
            // x^T A x for a few rough vectors.
            for k in 1..6u32 {
                let x: Vec<f64> = (0..d.system.size)
                    .map(|i| (i as f64 * f64::from(k) * 0.7).sin())
                    .collect();
                let xax: f64 = apply(b, &x).iter().zip(&x).map(|(y, x)| x * y).sum();
                assert!(xax >= 0.0, "{scheme:?} {:?}: {xax:e}", b.parameter);
            }
        }
    }
}

#[test]
fn rows_of_conduction_sum_to_the_edge_and_storage_to_the_area() {
    for scheme in SCHEMES {
        let g = full();
        let d = discretise(&g, scheme, &coarse()).unwrap();
        let one = vec![1.0; d.system.size];
        let around: f64 = d
            .mesh
            .edge
            .iter()
            .map(|&[a, b]| {
                let (p, q) = (d.mesh.points[a], d.mesh.points[b]);
                (p[0] - q[0]).hypot(p[1] - q[1])
            })
            .sum();
        for b in &d.system.stiffness {
            let rows = apply(b, &one);
            let largest = b
                .matrix
                .triplet_iter()
                .map(|t| t.val.abs())
                .fold(0.0, f64::max);
            let total: f64 = rows.iter().sum();
            match b.parameter {
                Parameter::Transmissivity(_) => {
                    let edge = T / g.edge.distance * around;
                    assert!(
                        (total / edge - 1.0).abs() < 1e-9,
                        "{scheme:?} {total:e} {edge:e}"
                    );
                    for (i, row) in rows.iter().enumerate() {
                        let p = d.system.nodes[i].0;
                        let inner = (p[0] - d.mesh.centre[0]).hypot(p[1] - d.mesh.centre[1])
                            < 0.95 * g.edge.distance;
                        assert!(
                            !inner || row.abs() < 1e-11 * largest,
                            "{scheme:?} row {i}: {row:e}"
                        );
                    }
                }
                _ => assert!(
                    rows.iter().all(|r| r.abs() < 1e-11 * largest),
                    "{scheme:?} {:?}",
                    b.parameter
                ),
            }
        }
        let n = d.mesh.edge.len() as f64;
        let disc = 0.5 * n * (2.0 * PI / n).sin() * g.edge.distance.powi(2);
        for l in 0..2 {
            let stored: f64 = apply(block(&d.system.mass, Parameter::Storativity(l)), &one)
                .iter()
                .sum();
            assert!(
                (stored / (S * disc) - 1.0).abs() < 1e-3,
                "{scheme:?} {stored:e}"
            );
        }
        let bore: f64 = apply(block(&d.system.mass, Parameter::Storage(2)), &one)
            .iter()
            .sum();
        assert!((bore - 2e-7).abs() < 1e-20);
    }
}

#[test]
fn linear_conduction_is_the_two_point_flux() {
    // Bank & Rose 1987: on a Delaunay mesh linear elements conduct as Voronoi cells do.
    let g = three_wells();
    let linear = discretise(&g, Scheme::LinearLumped, &coarse()).unwrap();
    let volume = discretise(&g, Scheme::FiniteVolume, &coarse()).unwrap();
    let of = |d: &Discrete| {
        let b = block(&d.system.stiffness, Parameter::Transmissivity(0)).clone();
        b.matrix
            .triplet_iter()
            .map(|t| ((t.row, t.col), *t.val))
            .collect::<std::collections::BTreeMap<_, _>>()
    };
    let (a, b) = (of(&linear), of(&volume));
    assert_eq!(a.len(), b.len());
    for (at, x) in &a {
        let y = b[at];
        assert!((x - y).abs() < 1e-10 * T, "{at:?}: {x:e} {y:e}");
        assert!(
            at.0 == at.1 || y < 1e-10 * T,
            "flux {y:e} at {at:?} runs uphill"
        );
    }
    let cells = block(&volume.system.mass, Parameter::Storativity(0));
    assert!(cells.matrix.triplet_iter().all(|t| *t.val > 0.0));
}

#[test]
fn two_assemblies_are_equal_to_the_bit() {
    let (a, b) = (
        discretise(&full(), Scheme::Quadratic, &coarse())
            .unwrap()
            .system,
        discretise(&full(), Scheme::Quadratic, &coarse())
            .unwrap()
            .system,
    );
    for (x, y) in a
        .mass
        .iter()
        .chain(&a.stiffness)
        .zip(b.mass.iter().chain(&b.stiffness))
    {
        assert_eq!(x.parameter, y.parameter);
        assert_eq!(bits(x), bits(y));
    }
    assert_eq!(a.gauges, b.gauges);
    assert_eq!(a.nodes, b.nodes);
}

fn groups(g: &Ground) -> Vec<Vec<usize>> {
    for scheme in [Scheme::Quadratic, Scheme::FiniteVolume] {
        let d = discretise(g, scheme, &coarse()).unwrap();
        for group in &d.system.closed_components {
            let mut x = vec![0.0; d.system.size];
            group.iter().for_each(|&i| x[i] = 1.0);
            for b in &d.system.stiffness {
                let largest = b
                    .matrix
                    .triplet_iter()
                    .map(|t| t.val.abs())
                    .fold(0.0, f64::max);
                assert!(apply(b, &x).iter().all(|y| y.abs() < 1e-11 * largest));
            }
        }
    }
    discretise(g, Scheme::Quadratic, &coarse())
        .unwrap()
        .system
        .closed_components
}

#[test]
fn sealed_compartments_are_found() {
    let mut g = three_wells();
    assert!(groups(&g).is_empty());
    // A sealed ring round one well, in an open ground; then with one joint that leaks.
    let ring = [
        [900.0, 0.0],
        [1500.0, 0.0],
        [1500.0, 700.0],
        [900.0, 700.0],
        [900.0, 0.0],
    ];
    g.barriers = vec![barrier(&ring, 0.0)];
    let found = groups(&g);
    assert_eq!(found.len(), 1);
    let d = discretise(&g, Scheme::Quadratic, &coarse()).unwrap();
    assert!(found[0].contains(&d.system.wells[1].0[0].0));
    assert!(!found[0].contains(&d.system.wells[0].0[0].0));
    g.barriers[0].conductance = 1e-16;
    assert!(groups(&g).is_empty());

    // A sealed line through a closed ground; then two layers without leakance.
    g.edge.kind = EdgeKind::Closed;
    g.barriers = vec![barrier(&[[600.0, -40_000.0], [700.0, 40_000.0]], 0.0)];
    assert_eq!(groups(&g).len(), 2);
    g.layers = vec![layer(), layer()];
    assert_eq!(groups(&g).len(), 4);
    g.layers[0].leakance_below = Some(1e-18);
    assert_eq!(groups(&g).len(), 2);
    g.barriers.clear();
    assert_eq!(groups(&g).len(), 1);
}

#[test]
fn any_point_can_be_located() {
    let g = full();
    for scheme in SCHEMES {
        let d = discretise(&g, scheme, &coarse()).unwrap();
        for p in [[123.0, -456.0], [-5000.0, 8000.0], [1400.1, -1990.0]] {
            let f = d.locate(p, 1).unwrap();
            let whole: f64 = f.0.iter().map(|w| w.1).sum();
            assert!((whole - 1.0).abs() < 1e-12);
            if scheme != Scheme::FiniteVolume {
                // Linear fields are met exactly.
                for (axis, wanted) in p.into_iter().enumerate() {
                    let at: f64 =
                        f.0.iter()
                            .map(|&(i, w)| w * d.system.nodes[i].0[axis])
                            .sum();
                    assert!((at - wanted).abs() < 1e-6, "{scheme:?} {at} {}", wanted);
                }
            }
            assert!(f.0.iter().all(|&(i, _)| d.system.nodes[i].1 == 1));
        }
        // In its own layer a well's circle is its ring; in another it is ground.
        assert_eq!(d.locate([0.02, 0.01], 0).unwrap(), d.system.wells[0]);
        assert_ne!(d.locate([0.02, 0.01], 1).unwrap(), d.system.wells[0]);
        assert!(matches!(
            d.locate([26_000.0, 0.0], 0),
            Err(ModelError::Mesh { .. })
        ));
        assert!(matches!(
            d.locate([0.0, 100.0], 2),
            Err(ModelError::Mesh { .. })
        ));
    }
}

#[test]
fn wrong_numbers_are_refused() {
    let mut g = three_wells();
    g.layers[0].storativity = 0.0;
    let refused = discretise(&g, Scheme::Quadratic, &coarse());
    assert!(
        matches!(refused, Err(ModelError::Parameter { what, .. }) if what.contains("storativity"))
    );
    let mut g = three_wells();
    g.layers[0].leakance_below = Some(1e-17);
    assert!(discretise(&g, Scheme::Quadratic, &coarse()).is_err());
    let mut g = three_wells();
    g.wells[0].layer = 3;
    assert!(discretise(&g, Scheme::Quadratic, &coarse()).is_err());
}

/// A well in a row of gauges, close together.
fn small_site() -> Ground {
    let mut g = ground(EdgeKind::Closed, 500.0);
    g.wells = vec![well("W", [0.0, 0.0])];
    for k in -3..4 {
        let at = f64::from(k) * 100.0;
        if k != 0 {
            g.gauges.push(gauge("G", in_ground([at, at])));
        }
    }
    g
}

#[test]
fn volumes_are_differences_on_a_lattice() {
    for g in [small_site(), three_wells()] {
        let differences = discretise(&g, Scheme::FiniteDifference, &coarse()).unwrap();
        differences.mesh.check().unwrap();
        let volumes = discretise_on(&g, Scheme::FiniteVolume, differences.mesh.clone()).unwrap();
        let both = [
            (&differences.system.mass, &volumes.system.mass),
            (&differences.system.stiffness, &volumes.system.stiffness),
        ];
        for (a, b) in both.into_iter().flat_map(|(a, b)| a.iter().zip(b)) {
            let list = |b: &SparseBlock| {
                let all = b.matrix.triplet_iter().map(|t| ((t.row, t.col), *t.val));
                all.filter(|e| e.1 != 0.0)
                    .collect::<std::collections::BTreeMap<_, _>>()
            };
            let (a, b) = (list(a), list(b));
            let largest = a.values().fold(0.0, |m: f64, v| m.max(v.abs()));
            for at in a.keys().chain(b.keys()) {
                let (x, y) = (a.get(at).unwrap_or(&0.0), b.get(at).unwrap_or(&0.0));
                assert!((x - y).abs() < 1e-9 * largest, "{at:?}: {x:e} {y:e}");
            }
        }
    }
    let mut g = three_wells();
    let triangles = discretise(&g, Scheme::LinearLumped, &coarse())
        .unwrap()
        .mesh;
    assert!(discretise_on(&g, Scheme::FiniteDifference, triangles).is_err());
    g.barriers = vec![barrier(&[[1400.0, -2000.0], [1600.0, 2500.0]], 0.0)];
    assert!(discretise(&g, Scheme::FiniteDifference, &coarse()).is_err());
}
