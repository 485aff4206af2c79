//! Zones, barriers, anisotropy and compartments against closed forms.

use std::f64::consts::PI;

use borewake_model::ModelError;
use borewake_model::closed_form::k0;
use borewake_model::ground::mesh::{Mesh, MeshOptions};
use borewake_model::ground::{Anisotropy, Barrier, EdgeKind, Ground, Point, Zone};
use borewake_model::weak_form::{Parameter, Scheme, discretise};

use crate::support::{S, T, gauge, ground, in_ground, three_wells, transfer, value, well};

fn zone(outline: &[Point], t: f64, s: f64) -> Zone {
    Zone {
        name: "far side".into(),
        layer: 0,
        outline: outline.to_vec(),
        transmissivity: t * T,
        storativity: s * S,
    }
}

fn half_plane(x: f64, t: f64, s: f64) -> Zone {
    let far = 50_000.0;
    zone(&[[x, -far], [far, -far], [far, far], [x, far]], t, s)
}

#[test]
fn beyond_a_straight_contact_the_image_has_the_contrast_of_transmissivities() {
    // Two half-planes of one diffusivity: the image's strength is (T1 - T2)/(T1 + T2), and what passes 2 T1/(T1 + T2)
    // of a line source in T1 (Carslaw & Jaeger 1959, Conduction of Heat in Solids, for heat).
    for contrast in [0.1, 8.0] {
        let mut g = ground(EdgeKind::Open, 20_000.0);
        g.wells = vec![well("W", [0.0, 0.0])];
        let at = [
            [150.0, 200.0],
            [-500.0, 100.0],
            [600.0, -300.0],
            [900.0, 0.0],
        ];
        g.gauges = at.iter().map(|p| gauge("G", in_ground(*p))).collect();
        g.zones = vec![half_plane(400.0, contrast, contrast)];
        let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
        for s in [1e-6, 1e-5] {
            let x = transfer(&d.system, s, &d.system.wells);
            let root = (s * S / T).sqrt();
            for (i, p) in at.iter().enumerate() {
                let (direct, image) = (p[0].hypot(p[1]), (p[0] - 800.0).hypot(p[1]));
                let exact = if p[0] > 400.0 {
                    2.0 / (1.0 + contrast) * k0(direct * root)
                } else {
                    k0(direct * root) + (1.0 - contrast) / (1.0 + contrast) * k0(image * root)
                };
                let error = 2.0 * PI * T * value(&d.system.gauges[i], &x, 0) - exact;
                assert!(
                    error.abs() < 2e-3,
                    "contrast {contrast} s {s:e} gauge {i}: {error:.2e}"
                );
            }
        }
    }
}

#[test]
fn a_barrier_resists_by_its_conductance() {
    // Along the line a wave number k decays with K = sqrt(k^2 + s S/T); of it TK/(2c + TK) comes back, the rest passes.
    // With k = sqrt(s S/T) sinh u the integral over wave numbers settles fast.
    let mut g = ground(EdgeKind::Open, 20_000.0);
    g.wells = vec![well("W", [0.0, 0.0])];
    let at = [
        [150.0, 200.0],
        [-500.0, 100.0],
        [600.0, -300.0],
        [900.0, 0.0],
    ];
    g.gauges = at.iter().map(|p| gauge("G", in_ground(*p))).collect();
    // The resistance of 10 m, 200 m and 5 km of ground.
    for length in [10.0, 200.0, 5000.0] {
        let conductance = T / length;
        g.barriers = vec![Barrier {
            name: "fault".into(),
            line: vec![[400.0, -50_000.0], [400.0, 50_000.0]],
            conductance,
        }];
        let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
        for s in [1e-6, 1e-5] {
            let x = transfer(&d.system, s, &d.system.wells);
            let root = (s * S / T).sqrt();
            for (i, p) in at.iter().enumerate() {
                let step = 1e-3;
                let wave = |reaches: f64, share: &dyn Fn(f64) -> f64| -> f64 {
                    let terms = (0..9000).map(|n| {
                        let u = step * f64::from(n);
                        let decay = root * u.cosh();
                        let weight = if n == 0 { 0.5 } else { 1.0 };
                        weight
                            * share(decay)
                            * (-decay * reaches).exp()
                            * (root * u.sinh() * p[1]).cos()
                    });
                    step * terms.sum::<f64>()
                };
                let back = |k: f64| T * k / (2.0 * conductance + T * k);
                let exact = if p[0] > 400.0 {
                    wave(p[0], &|k| 1.0 - back(k))
                } else {
                    k0(p[0].hypot(p[1]) * root) + wave(800.0 - p[0], &back)
                };
                let error = 2.0 * PI * T * value(&d.system.gauges[i], &x, 0) - exact;
                assert!(
                    error.abs() < 2e-3,
                    "{length} m s {s:e} gauge {i}: {error:.2e} of {exact:.3}"
                );
            }
        }
    }
}

#[test]
fn a_zone_with_the_properties_of_its_layer_is_none() {
    let mut g = three_wells();
    let free = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    g.zones = vec![zone(
        &[
            [200.0, -900.0],
            [1500.0, -700.0],
            [1900.0, 900.0],
            [700.0, 1300.0],
        ],
        1.0,
        1.0,
    )];
    let zoned = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    for parameter in [
        Parameter::ZoneTransmissivity(0),
        Parameter::ZoneStorativity(0),
    ] {
        let all = zoned.system.mass.iter().chain(&zoned.system.stiffness);
        assert!(all.into_iter().any(|b| b.parameter == parameter));
    }
    let (a, b) = (
        transfer(&free.system, 1e-6, &free.system.wells),
        transfer(&zoned.system, 1e-6, &zoned.system.wells),
    );
    for (i, (one, other)) in free
        .system
        .gauges
        .iter()
        .zip(&zoned.system.gauges)
        .enumerate()
    {
        for j in 0..3 {
            let error = 2.0 * PI * T * (value(one, &a, j) - value(other, &b, j));
            assert!(error.abs() < 1e-3, "gauge {i} well {j}: {error:.1e}");
        }
    }
}

#[test]
fn anisotropy_is_a_stretched_map() {
    // With A of determinant one, p = K0(sqrt(s S/T x.A^-1 x)) / 2 pi T.
    let (ratio, direction) = (4.0, 0.6f64);
    let mut g = ground(EdgeKind::Open, 25_000.0);
    g.layers[0].anisotropy = Some(Anisotropy { ratio, direction });
    g.wells = vec![well("W", [0.0, 0.0])];
    let at = [
        [400.0, 0.0],
        [0.0, 400.0],
        [350.0, 240.0],
        [-240.0, 350.0],
        [700.0, -600.0],
    ];
    g.gauges = at.iter().map(|p| gauge("G", in_ground(*p))).collect();
    for (scheme, within) in [(Scheme::Quadratic, 1e-3), (Scheme::LinearConsistent, 8e-2)] {
        let d = discretise(&g, scheme, &MeshOptions::default()).unwrap();
        for s in [1e-7, 1e-6, 1e-5] {
            let x = transfer(&d.system, s, &d.system.wells);
            for (i, p) in at.iter().enumerate() {
                let along = p[0] * direction.cos() + p[1] * direction.sin();
                let across = p[1] * direction.cos() - p[0] * direction.sin();
                let r = (along * along / ratio.sqrt() + across * across * ratio.sqrt()).sqrt();
                let exact = k0(r * (s * S / T).sqrt());
                let error = 2.0 * PI * T * value(&d.system.gauges[i], &x, 0) - exact;
                assert!(
                    error.abs() < within,
                    "{scheme:?} s {s:e} gauge {i}: {error:.2e} of {exact:.2}"
                );
            }
        }
    }
    let refused = discretise(&g, Scheme::FiniteVolume, &MeshOptions::default());
    assert!(
        matches!(refused, Err(ModelError::Parameter { what, .. }) if what.contains("anisotropy"))
    );
    // Along its lines a lattice follows it.
    g.layers[0].anisotropy = Some(Anisotropy {
        ratio,
        direction: 0.0,
    });
    let d = discretise(&g, Scheme::FiniteDifference, &MeshOptions::default()).unwrap();
    let x = transfer(&d.system, 1e-6, &d.system.wells);
    for (i, p) in at.iter().enumerate() {
        let r = (p[0] * p[0] / ratio.sqrt() + p[1] * p[1] * ratio.sqrt()).sqrt();
        let exact = k0(r * (1e-6 * S / T).sqrt());
        let error = 2.0 * PI * T * value(&d.system.gauges[i], &x, 0) - exact;
        assert!(error.abs() < 2e-2, "gauge {i}: {error:.2e} of {exact:.2}");
    }
}

/// Shape factor of a sealed rectangle with a well in its middle, from its pressure late.
fn shape_factor(width: f64, height: f64) -> f64 {
    let mut g = ground(EdgeKind::Closed, 3000.0);
    let mut w = well("W", [0.0, 0.0]);
    w.radius = 0.2;
    g.wells = vec![w];
    let (x, y) = (0.5 * width, 0.5 * height);
    g.barriers = vec![Barrier {
        name: "rim".into(),
        line: vec![[-x, -y], [x, -y], [x, y], [-x, y], [-x, -y]],
        conductance: 0.0,
    }];
    let d = discretise(
        &g,
        Scheme::Quadratic,
        &MeshOptions {
            points_per_ring: 24,
            refine: 1.0,
        },
    )
    .unwrap();
    let area = width * height - PI * 0.04;
    // As s falls the response is 1/(s S A) plus a constant, half the logarithm of 4 A/(e^gamma C_A rw^2) over 2 pi T.
    let s = 1e-3 * T / (S * area);
    let own = |s: f64| {
        value(
            &d.system.wells[0],
            &transfer(&d.system, s, &d.system.wells),
            0,
        ) - 1.0 / (s * S * area)
    };
    let constant = 2.0 * own(s) - own(2.0 * s);
    4.0 * area / (0.04 * (0.577_215_664_901_532_9 + 4.0 * PI * T * constant).exp())
}

#[test]
fn sealed_rectangles_have_their_shape_factors() {
    // Dietz 1965, J. Pet. Tech. 17, prints 30.8828 and 21.8369; exactly 30.88111 and 21.83624 (theta functions).
    for (width, height, exact) in [
        (1000.0, 1000.0, 30.881_106_230_5),
        (1400.0, 700.0, 21.836_239_626_1),
    ] {
        let found = shape_factor(width, height);
        assert!(
            (found / exact - 1.0).abs() < 3e-3,
            "{width} by {height}: {found} for {exact}"
        );
    }
}

fn refused(ground: &Ground, near: Point, words: &[&str]) {
    match Mesh::fit(ground, &MeshOptions::default()) {
        Err(ModelError::Mesh { x, y, why }) => {
            assert!((x - near[0]).hypot(y - near[1]) < 1.0, "at {x}, {y}: {why}");
            for word in words {
                assert!(why.contains(word), "{why}");
            }
        }
        other => panic!("{:?}", other.map(|m| m.quality())),
    }
}

#[test]
fn outlines_that_cannot_be_meshed_are_refused_with_their_place() {
    let square = [
        [200.0, -300.0],
        [900.0, -300.0],
        [900.0, 300.0],
        [200.0, 300.0],
    ];
    let mut g = three_wells();
    g.zones = vec![zone(&square[..2], 2.0, 1.0)];
    refused(&g, square[0], &["no area", "three corners"]);
    g.zones = vec![zone(
        &[square[0], square[2], square[1], square[3]],
        2.0,
        1.0,
    )];
    refused(&g, [550.0, 0.0], &["crosses itself", "in order"]);
    g.zones = vec![zone(&square.map(|p| [p[0] + 60_000.0, p[1]]), 2.0, 1.0)];
    refused(&g, [60_200.0, -300.0], &["outside the edge"]);
    g.zones = vec![zone(&square.map(|p| [p[0] - 200.0, p[1]]), 2.0, 1.0)];
    refused(&g, [0.0, 0.0], &["outline of zone far side", "well I-1"]);
    let mut lost = three_wells();
    lost.zones = vec![zone(&[[f64::NAN, 0.0], square[1], square[2]], 2.0, 1.0)];
    assert!(matches!(
        Mesh::fit(&lost, &MeshOptions::default()),
        Err(ModelError::NotFinite(_))
    ));
    g.zones = vec![zone(&square, 0.0, 1.0)];
    let refused = discretise(&g, Scheme::Quadratic, &MeshOptions::default());
    assert!(
        matches!(refused, Err(ModelError::Parameter { what, .. }) if what.contains("zone far side"))
    );
}

#[test]
fn outlines_may_cross_and_follow_barriers_and_each_other() {
    let mut g = three_wells();
    g.barriers = vec![Barrier {
        name: "fault".into(),
        line: vec![[600.0, -2000.0], [600.0, 2500.0]],
        conductance: 1e-12,
    }];
    // One crosses the barrier, one shares a part of it and a side with the first, one reaches beyond the edge.
    g.zones = vec![
        zone(
            &[
                [200.0, -1500.0],
                [1000.0, -1500.0],
                [1000.0, -700.0],
                [200.0, -700.0],
            ],
            3.0,
            1.0,
        ),
        zone(
            &[
                [600.0, -1900.0],
                [1000.0, -1500.0],
                [1000.0, -700.0],
                [600.0, 200.0],
            ],
            0.2,
            1.0,
        ),
        zone(
            &[
                [3000.0, -1000.0],
                [40_000.0, -1000.0],
                [40_000.0, 1500.0],
                [3000.0, 1500.0],
            ],
            5.0,
            2.0,
        ),
    ];
    let mesh = Mesh::fit(&g, &MeshOptions::default()).unwrap();
    mesh.check().unwrap();
    let quality = mesh.quality();
    assert!(quality.least_angle > 5.0, "{quality:?}");
    // Every triangle lies on one side of every outline: its middle and its corners moved toward it agree.
    for t in 0..mesh.triangles.len() {
        let corners = mesh.corners(t);
        let middle = [0, 1].map(|k| corners.iter().map(|c| c[k] / 3.0).sum::<f64>());
        for zone in &g.zones {
            for corner in corners {
                let p = [0, 1].map(|k| corner[k] + 1e-3 * (middle[k] - corner[k]));
                assert_eq!(zone.holds(p), zone.holds(middle), "at {p:?}");
            }
        }
    }
    assert_eq!(g.zone_at([700.0, -1000.0], 0), Some(1));
    assert_eq!(g.zone_at([400.0, -1000.0], 0), Some(0));
    assert_eq!(g.zone_at([0.0, 0.0], 0), None);
    discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
}
