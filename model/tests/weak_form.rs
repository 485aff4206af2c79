//! Identities that every scheme must keep, and closed forms for what the line source does not show.

mod support;

use std::f64::consts::PI;

use borewake_model::ModelError;
use borewake_model::closed_form::{k0, k1};
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{Barrier, EdgeKind, Ground, Layer, Point, Seat};
use borewake_model::weak_form::{Discrete, Parameter, Scheme, SparseBlock, discretise};
use support::{S, T, gauge, ground, in_ground, layer, three_wells, transfer, value, well};

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

/// Error of a well's own response in the Laplace domain at one day, as a share of `1/2 pi T`.
fn own_error(scheme: Scheme, n: usize) -> f64 {
    let mut g = ground(EdgeKind::Open, 12_000.0);
    g.wells = vec![well("W", [0.0, 0.0])];
    let d = discretise(
        &g,
        scheme,
        &MeshOptions {
            points_per_ring: n,
            refine: 1.0,
        },
    )
    .unwrap();
    let s = 1.0 / 86_400.0;
    let x = transfer(&d.system, s, &d.system.wells);
    let z = 0.11 * (s * S / T).sqrt();
    2.0 * PI * T * value(&d.system.wells[0], &x, 0) - k0(z) / (z * k1(z))
}

#[test]
fn errors_fall_with_the_order_of_the_scheme() {
    for (scheme, order) in [
        (Scheme::Quadratic, 4.0),
        (Scheme::LinearConsistent, 2.0),
        (Scheme::LinearLumped, 2.0),
        (Scheme::FiniteVolume, 2.0),
    ] {
        let (coarse, fine) = (own_error(scheme, 10), own_error(scheme, 20));
        let found = (coarse / fine).abs().log2();
        assert!(
            (found - order).abs() < 0.35,
            "{scheme:?}: {coarse:.2e} {fine:.2e} order {found:.2}"
        );
    }
}

#[test]
fn a_negative_skin_is_a_larger_well() {
    let mut g = ground(EdgeKind::Open, 12_000.0);
    let mut w = well("W", [0.0, 0.0]);
    w.skin = -3.0;
    g.wells = vec![w];
    let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    let s = 1.0 / 86_400.0;
    let x = transfer(&d.system, s, &d.system.wells);
    let z = 0.11 * 3f64.exp() * (s * S / T).sqrt();
    let skin = 2.0 * PI * T * value(&d.system.wells[0], &x, 0) - k0(z) / (z * k1(z));
    assert!(skin.abs() < 0.005, "off by a skin of {skin:.4}");
}

#[test]
fn storage_and_skin_at_the_well() {
    // Agarwal, Al-Hussainy & Ramey 1970, SPEJ: the well with storage and skin in the Laplace domain.
    for skin in [4.0, 0.0, -2.0] {
        let mut g = ground(EdgeKind::Open, 12_000.0);
        let mut w = well("W", [0.0, 0.0]);
        (w.skin, w.storage) = (skin, 3e-7);
        g.wells = vec![w];
        g.gauges = vec![gauge("G", Seat::InWell(0))];
        let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
        for s in [1e-6, 1e-4, 1e-2] {
            let x = transfer(&d.system, s, &d.system.wells);
            let z = 0.11 * f64::exp(-f64::min(skin, 0.0)) * (s * S / T).sqrt();
            let ground = (k0(z) / (z * k1(z)) + skin.max(0.0)) / (2.0 * PI * T);
            let exact = ground / (1.0 + s * 3e-7 * ground);
            let found = value(&d.system.gauges[0], &x, 0);
            assert!(
                (found / exact - 1.0).abs() < 5e-4,
                "skin {skin} s {s}: {found:e} {exact:e}"
            );
        }
    }
}

#[test]
fn a_sealed_line_is_an_image() {
    let mut g = ground(EdgeKind::Open, 20_000.0);
    g.wells = vec![well("W", [0.0, 0.0])];
    let at = [
        [250.0, 300.0],
        [380.0, -200.0],
        [-500.0, 100.0],
        [900.0, 0.0],
    ];
    g.gauges = at.iter().map(|p| gauge("G", in_ground(*p))).collect();
    g.barriers = vec![barrier(&[[400.0, -30_000.0], [400.0, 30_000.0]], 0.0)];
    let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    for s in [1e-7, 1e-6, 1e-5, 1e-4] {
        let x = transfer(&d.system, s, &d.system.wells);
        let root = (s * S / T).sqrt();
        for (i, p) in at.iter().enumerate() {
            let (direct, image) = (p[0].hypot(p[1]), (p[0] - 800.0).hypot(p[1]));
            let beyond = p[0] > 400.0;
            let exact = if beyond {
                0.0
            } else {
                (k0(direct * root) + k0(image * root)) / (2.0 * PI * T)
            };
            let error = 2.0 * PI * T * (value(&d.system.gauges[i], &x, 0) - exact);
            assert!(error.abs() < 1.5e-3, "s {s:e} gauge {i}: {error:.2e}");
        }
    }
}

#[test]
fn a_line_that_lets_all_pass_is_none() {
    let mut g = three_wells();
    let free = discretise(&g, Scheme::Quadratic, &coarse()).unwrap();
    g.barriers = vec![barrier(&[[800.0, -2000.0], [800.0, 2500.0]], 1e3 * T)];
    let open = discretise(&g, Scheme::Quadratic, &coarse()).unwrap();
    g.barriers[0].conductance = 1e-4 * T;
    let tight = discretise(&g, Scheme::Quadratic, &coarse()).unwrap();
    let at = |d: &Discrete| {
        let x = transfer(&d.system, 1e-6, &d.system.wells);
        2.0 * PI * T * value(&d.system.gauges[4], &x, 1)
    };
    assert!(
        (at(&free) - at(&open)).abs() < 2e-3,
        "{} {}",
        at(&free),
        at(&open)
    );
    assert!(at(&tight) < 0.3 * at(&free), "{} {}", at(&free), at(&tight));
}

#[test]
fn two_leaky_layers() {
    // Separated exactly: T_i lap p_i = s S_i p_i + L (p_i - p_j) has two modes, each with its own K0.
    let (t2, s2, leak) = (8.0e-9, 9.0e-9, 4e-14);
    let mut g = ground(EdgeKind::Open, 20_000.0);
    g.layers = vec![
        Layer {
            leakance_below: Some(leak),
            ..layer()
        },
        Layer {
            name: "lower".into(),
            transmissivity: t2,
            storativity: s2,
            leakance_below: None,
        },
    ];
    g.wells = vec![well("W", [0.0, 0.0])];
    g.gauges = vec![
        gauge(
            "upper",
            Seat::InGround {
                at: [300.0, 200.0],
                layer: 0,
            },
        ),
        gauge(
            "lower",
            Seat::InGround {
                at: [300.0, 200.0],
                layer: 1,
            },
        ),
        gauge(
            "under",
            Seat::InGround {
                at: [0.0, 0.0],
                layer: 1,
            },
        ),
    ];
    let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    let r = 300f64.hypot(200.0);
    for s in [1e-7, 1e-6, 1e-5] {
        let x = transfer(&d.system, s, &d.system.wells);
        // A = T^-1/2 (s S + L) T^-1/2, symmetric.
        let (a, b, c) = (
            (s * S + leak) / T,
            -leak / (T * t2).sqrt(),
            (s * s2 + leak) / t2,
        );
        let (mean, half) = (0.5 * (a + c), (0.25 * (a - c).powi(2) + b * b).sqrt());
        let mut exact = [0.0; 3];
        for w in [mean + half, mean - half] {
            let v = [b, w - a];
            let norm = v[0] * v[0] + v[1] * v[1];
            let k = k0(r * w.sqrt()) / (2.0 * PI);
            exact[0] += v[0] * v[0] / norm * k / T;
            exact[1] += v[0] * v[1] / norm * k / (T * t2).sqrt();
            // At no distance the logarithms of the two modes cancel.
            exact[2] += v[0] * v[1] / norm * -(0.5 * w.ln()) / (2.0 * PI) / (T * t2).sqrt();
        }
        for (i, exact) in exact.iter().enumerate() {
            let error = 2.0 * PI * T * (value(&d.system.gauges[i], &x, 0) - exact);
            assert!(error.abs() < 1e-3, "s {s:e} gauge {i}: {error:.2e}");
        }
    }
}

#[test]
fn a_fixed_edge_holds_and_a_closed_one_keeps() {
    let mut g = ground(EdgeKind::Fixed, 4000.0);
    g.wells = vec![well("W", [0.0, 0.0])];
    let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    assert!(d.system.closed_components.is_empty());
    let x = transfer(&d.system, 0.0, &d.system.wells);
    let steady = 2.0 * PI * T * value(&d.system.wells[0], &x, 0);
    assert!((steady - (4000f64 / 0.11).ln()).abs() < 0.01, "{steady}");

    g.edge.kind = EdgeKind::Closed;
    let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    assert_eq!(
        d.system.closed_components,
        vec![(0..d.system.size).collect::<Vec<_>>()]
    );
    // In the end the ground fills like a tank: p = t / (S area).
    let s = 1e-13;
    let x = transfer(&d.system, s, &d.system.wells);
    let tank = value(&d.system.wells[0], &x, 0) * s * S * PI * 4000f64.powi(2);
    assert!((tank - 1.0).abs() < 1e-4, "{tank}");
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
                for axis in 0..2 {
                    let at: f64 =
                        f.0.iter()
                            .map(|&(i, w)| w * d.system.nodes[i].0[axis])
                            .sum();
                    assert!((at - p[axis]).abs() < 1e-6, "{scheme:?} {at} {}", p[axis]);
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
