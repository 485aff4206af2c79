//! Meshes of good and bad grounds.

#![allow(
    clippy::indexing_slicing,
    clippy::panic,
    clippy::unwrap_used,
    reason = "tests may fail loudly"
)]

mod support;

use borewake_model::ModelError;
use borewake_model::ground::mesh::{Mesh, MeshOptions};
use borewake_model::ground::{Barrier, EdgeKind, Ground, Layer, Neighbour, Point, Seat};
use proptest::prelude::*;
use support::{gauge, ground, in_ground, layer, three_wells, well};

fn barrier(line: &[Point]) -> Barrier {
    Barrier {
        name: "fault".into(),
        line: line.to_vec(),
        conductance: 0.0,
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
fn bad_geometry_is_refused_with_its_place() {
    let mut g = three_wells();
    g.gauges.push(gauge("X", in_ground([1210.0, 340.0])));
    refused(&g, [1210.0, 340.0], &["gauge X", "well I-2", "seat it"]);

    let mut g = three_wells();
    g.wells.push(well("I-4", [0.0, 0.0]));
    refused(&g, [0.0, 0.0], &["I-1", "I-4"]);

    let mut g = three_wells();
    g.wells[0].skin = -6.0;
    g.wells[1].at = [60.0, 0.0];
    refused(&g, [0.0, 0.0], &["apart", "skin"]);

    let mut g = three_wells();
    g.barriers = vec![barrier(&[[-420.0, -2000.0], [-420.0, 2000.0]])];
    refused(
        &g,
        [-420.0, 980.0],
        &["barrier fault passes through well I-3"],
    );

    let mut g = three_wells();
    g.barriers = vec![
        barrier(&[[700.0, -2000.0], [700.0, 2000.0]]),
        barrier(&[[500.0, 300.0], [900.0, 300.0]]),
    ];
    refused(&g, [700.0, 300.0], &["cross", "corner"]);

    let mut g = three_wells();
    g.barriers = vec![
        barrier(&[[700.0, -2000.0], [700.0, 2000.0]]),
        barrier(&[[700.0, -2000.0], [701.0, 1000.0]]),
    ];
    refused(&g, [700.0, -2000.0], &["run back along each other"]);

    let mut g = three_wells();
    g.barriers = vec![barrier(&[[50_000.0, 0.0], [60_000.0, 10.0]])];
    refused(&g, [50_000.0, 0.0], &["outside the edge"]);

    let mut g = three_wells();
    g.neighbours[0].at = [30_000.0, 0.0];
    refused(
        &g,
        [30_000.0, 0.0],
        &["neighbour N", "outside the edge", "distance above"],
    );

    let mut g = three_wells();
    g.barriers = vec![barrier(&[[700.0, 0.0]])];
    refused(&g, [700.0, 0.0], &["no length"]);
}

#[test]
fn numbers_that_are_none_are_refused() {
    let mut g = three_wells();
    g.wells[0].at[1] = f64::NAN;
    assert!(matches!(
        Mesh::fit(&g, &MeshOptions::default()),
        Err(ModelError::NotFinite(_))
    ));
    let mut g = three_wells();
    g.edge.distance = -1.0;
    assert!(matches!(
        Mesh::fit(&g, &MeshOptions::default()),
        Err(ModelError::Parameter { .. })
    ));
}

#[test]
fn a_mesh_is_reproducible_and_survives_its_file() {
    let mut g = three_wells();
    g.barriers = vec![barrier(&[[1400.0, -2000.0], [1600.0, 2500.0]])];
    let one = Mesh::fit(&g, &MeshOptions::default()).unwrap();
    let two = Mesh::fit(&g, &MeshOptions::default()).unwrap();
    assert_eq!(one, two);
    one.check().unwrap();
    let bytes = postcard::to_stdvec(&one).unwrap();
    let back: Mesh = postcard::from_bytes(&bytes).unwrap();
    assert_eq!(one, back);
    let mut broken = back;
    broken.triangles.pop();
    assert!(broken.check().is_err());
}

#[test]
fn angles_and_numbers_of_nodes() {
    let plain = Mesh::fit(&three_wells(), &MeshOptions::default()).unwrap();
    let quality = plain.quality();
    assert!(quality.least_angle > 20.0, "{quality:?}");
    assert!(quality.quadratic_nodes < 25_000, "{quality:?}");
    let coarse = Mesh::fit(
        &three_wells(),
        &MeshOptions {
            refine: 0.75,
            ..MeshOptions::default()
        },
    )
    .unwrap();
    assert!(
        coarse.quality().quadratic_nodes * 3 < quality.quadratic_nodes * 2,
        "{:?}",
        coarse.quality()
    );
}

#[test]
fn barriers_that_meet_part_the_ground_into_sectors() {
    // A cross of four arms that share a corner: four sectors there, two sides elsewhere.
    let mut g = ground(EdgeKind::Closed, 5000.0);
    g.gauges = vec![
        gauge("A", in_ground([300.0, 300.0])),
        gauge("B", in_ground([-300.0, -300.0])),
    ];
    for end in [[1000.0, 0.0], [-1000.0, 0.0], [0.0, 1000.0], [0.0, -1000.0]] {
        g.barriers.push(barrier(&[[0.0, 0.0], end]));
    }
    let mesh = Mesh::fit(&g, &MeshOptions::default()).unwrap();
    mesh.check().unwrap();
    let here = |p: &&Point| p[0].hypot(p[1]) < 1e-9;
    assert_eq!(mesh.points.iter().filter(here).count(), 4);
    let end = |p: &&Point| (p[0] - 1000.0).hypot(p[1]) < 1e-9;
    assert_eq!(mesh.points.iter().filter(end).count(), 1);
}

#[test]
fn wells_and_gauges_of_several_layers_share_a_place() {
    let mut g = three_wells();
    g.layers = vec![
        Layer {
            leakance_below: Some(1e-16),
            ..layer()
        },
        layer(),
    ];
    let mut deep = well("D-1", [0.0, 0.0]);
    deep.layer = 1;
    deep.radius = 0.3;
    g.wells.push(deep);
    let mut twin = well("D-2", [1210.0, 340.0]);
    twin.layer = 1;
    g.wells.push(twin);
    g.gauges.push(gauge(
        "above",
        Seat::InGround {
            at: [-420.0, 980.0],
            layer: 1,
        },
    ));
    g.gauges.push(gauge(
        "beside",
        Seat::InGround {
            at: [-420.1, 980.0],
            layer: 1,
        },
    ));
    let mesh = Mesh::fit(&g, &MeshOptions::default()).unwrap();
    mesh.check().unwrap();
    assert!(mesh.wells[3].inside.len() > mesh.wells[0].inside.len());
    assert_eq!(mesh.wells[1], mesh.wells[4]);
    let n = mesh.gauges.len();
    assert!(mesh.gauges[n - 2].is_some() && mesh.gauges[n - 1].is_none());

    g.wells[3].radius = 0.12;
    refused(&g, [0.0, 0.0], &["nearly equal radii"]);
}

fn site() -> impl Strategy<Value = Ground> {
    let point = || (-2000.0..2000.0f64, -2000.0..2000.0f64).prop_map(|(x, y)| [x, y]);
    let far = || (-9000.0..9000.0f64, -9000.0..9000.0f64).prop_map(|(x, y)| [x, y]);
    (
        proptest::collection::vec((point(), -4.0..10.0f64), 1..5),
        proptest::collection::vec(point(), 0..6),
        proptest::collection::vec(point(), 0..3),
        proptest::collection::vec(proptest::collection::vec(far(), 2..5), 0..3),
        4000.0..30_000.0f64,
    )
        .prop_map(|(wells, gauges, others, lines, distance)| {
            let mut g = ground(EdgeKind::Open, distance);
            for (at, skin) in wells {
                let mut w = well("W", at);
                w.skin = skin;
                g.wells.push(w);
            }
            g.gauges = gauges
                .into_iter()
                .map(|at| gauge("G", in_ground(at)))
                .collect();
            g.neighbours = others
                .into_iter()
                .map(|at| Neighbour {
                    name: "N".into(),
                    at,
                    layer: 0,
                })
                .collect();
            g.barriers = lines.iter().map(|l| barrier(l)).collect();
            g
        })
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 48, ..ProptestConfig::default() })]
    #[test]
    fn any_ground_gives_a_mesh_or_a_reason(g in site()) {
        match Mesh::fit(&g, &MeshOptions { points_per_ring: 10, refine: 1.0 }) {
            Ok(mesh) => {
                mesh.check().unwrap();
                let q = mesh.quality();
                prop_assert!(q.quadratic_nodes < 60_000, "{:?}", q);
                prop_assert!(q.least_angle > 0.0, "{:?}", q);
            }
            Err(ModelError::Mesh { why, .. }) => {
                prop_assert!(!why.contains("broke down") && !why.contains("fall together"), "{}", why);
            }
            Err(other) => prop_assert!(false, "{}", other),
        }
    }
}
