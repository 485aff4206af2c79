//! Closed forms for what the line source does not show, and the order of each scheme.

#![allow(
    clippy::indexing_slicing,
    clippy::panic,
    clippy::unwrap_used,
    reason = "tests may fail loudly"
)]

mod support;

use std::f64::consts::PI;

use borewake_model::closed_form::{k0, k1};
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{Barrier, EdgeKind, Layer, Point, Seat};
use borewake_model::weak_form::{Discrete, Scheme, discretise};
use support::{S, T, gauge, ground, in_ground, layer, three_wells, transfer, value, well};

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
            anisotropy: None,
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

#[test]
fn simpler_schemes_agree_with_the_working_one() {
    let g = three_wells();
    for (scheme, within) in [
        (Scheme::LinearLumped, 0.03),
        (Scheme::FiniteVolume, 0.03),
        (Scheme::FiniteDifference, 0.05),
    ] {
        let d = discretise(&g, scheme, &MeshOptions::default()).unwrap();
        for s in [1e-7, 1e-6, 1e-5] {
            let x = transfer(&d.system, s, &d.system.wells);
            for (i, seat) in g.gauges.iter().enumerate().skip(3) {
                let Seat::InGround { at, .. } = seat.seat else {
                    continue;
                };
                for (j, w) in g.wells.iter().enumerate() {
                    let r = (at[0] - w.at[0]).hypot(at[1] - w.at[1]);
                    let exact = k0(r * (s * S / T).sqrt());
                    let error = 2.0 * PI * T * value(&d.system.gauges[i], &x, j) - exact;
                    assert!(
                        error.abs() < within,
                        "{scheme:?} s {s:e} gauge {i} well {j}: {error:.1e} of {exact:.2}"
                    );
                }
            }
        }
    }
}
