//! What must hold in any ground: symmetry, positivity, the balance of volume, reciprocity, passivity.

use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{Anisotropy, Barrier, EdgeKind, Ground, Layer, Seat, Stage, Zone};
use borewake_model::reduce::{ReduceOptions, reduce};
use borewake_model::weak_form::{Discrete, Functional, Parameter, Scheme, System, discretise};
use proptest::prelude::*;

use crate::support::{S, T, gauge, ground, layer, sum, transfer, value, well};

const COARSE: MeshOptions = MeshOptions {
    points_per_ring: 8,
    refine: 1.0,
};

/// Up to three wells of any skin and storage, open to two layers or one, one along a line, a barrier, a zone, a river,
/// anisotropy, any edge.
fn any_ground() -> impl Strategy<Value = Ground> {
    let skin = prop_oneof![Just(-6.0), Just(0.0), Just(50.0), -6.0..50.0f64];
    let storage = prop_oneof![Just(0.0), 1e-9..1e-6f64];
    let a_well = (
        skin,
        storage,
        -150.0..150.0f64,
        -150.0..150.0f64,
        any::<bool>(),
    );
    let edge = prop_oneof![
        Just(EdgeKind::Open),
        Just(EdgeKind::Closed),
        Just(EdgeKind::Fixed),
        Just(EdgeKind::Driven)
    ];
    (
        proptest::collection::vec(a_well, 1..4),
        edge,
        proptest::option::of(1e-18..1e-15f64),
        proptest::option::of(prop_oneof![Just(0.0), 1e-15..1e-10f64]),
        proptest::option::of((0.05..20.0f64, 0.3..3.0f64)),
        proptest::option::of((1.0..8.0f64, 0.0..3.0f64)),
        proptest::option::of(1e-12..1e-8f64),
        any::<bool>(),
    )
        .prop_map(
            |(wells, kind, leakance, barrier, zone, anisotropy, stage, trace)| {
                let mut g = ground(kind, 6000.0);
                for (i, (skin, storage, dx, dy, both)) in wells.into_iter().enumerate() {
                    let x = 1200.0 * (i as f64 - 1.0);
                    let mut w = well(&format!("W-{i}"), [x + dx, dy]);
                    (w.skin, w.storage) = (skin, storage);
                    if leakance.is_some() && both {
                        w.also = vec![1];
                    }
                    g.wells.push(w);
                }
                let turned = anisotropy.map(|(ratio, direction)| Anisotropy { ratio, direction });
                g.layers[0].anisotropy = turned;
                if let Some(leakance) = leakance {
                    g.layers[0].leakance_below = Some(leakance);
                    g.layers.push(Layer {
                        name: "lower".into(),
                        transmissivity: 0.3 * T,
                        ..layer()
                    });
                }
                let last = g.layers.len() - 1;
                if trace {
                    let mut w = well("H", [-50.0, -1350.0]);
                    w.trace = vec![[-300.0, -1200.0], [-50.0, -1350.0], [200.0, -1500.0]];
                    w.also = (1..g.layers.len()).collect();
                    g.wells.push(w);
                }
                // It crosses the barrier and the zone.
                g.stages.extend(stage.map(|conductance| Stage {
                    name: "river".into(),
                    line: vec![[2000.0, -7000.0], [2100.0, 7000.0]],
                    layer: last,
                    conductance,
                }));
                g.gauges = vec![
                    gauge("well", Seat::InWell(0)),
                    gauge(
                        "ground",
                        Seat::InGround {
                            at: [350.0, 720.0],
                            layer: last,
                        },
                    ),
                ];
                g.barriers.extend(barrier.map(|conductance| Barrier {
                    name: "fault".into(),
                    line: vec![[-2500.0, 500.0], [2500.0, 600.0]],
                    conductance,
                }));
                g.zones.extend(zone.map(|(t, s)| Zone {
                    name: "channel".into(),
                    layer: 0,
                    outline: vec![
                        [-600.0, -700.0],
                        [3000.0, -700.0],
                        [3000.0, 1200.0],
                        [-600.0, 800.0],
                    ],
                    transmissivity: t * T,
                    storativity: s * S,
                }));
                g
            },
        )
}

fn scheme(g: &Ground, pick: usize) -> Scheme {
    let all = [
        Scheme::Quadratic,
        Scheme::LinearConsistent,
        Scheme::LinearLumped,
        Scheme::FiniteVolume,
    ];
    // Two-point fluxes know no direction.
    let turned = g.layers.iter().any(|l| l.anisotropy.is_some());
    all[pick % if turned { 3 } else { 4 }]
}

fn times_one(system: &System, storage: bool) -> Vec<f64> {
    let mut triplets = Vec::new();
    let blocks = if storage {
        &system.mass
    } else {
        &system.stiffness
    };
    sum(system.size, blocks, 1.0, &mut triplets);
    let mut rows = vec![0.0; system.size];
    triplets.iter().for_each(|t| rows[t.row] += t.val);
    rows
}

fn check(g: &Ground, d: &Discrete) -> Result<(), TestCaseError> {
    let system = &d.system;
    for b in system.mass.iter().chain(&system.stiffness) {
        let mut along: Vec<_> = b
            .matrix
            .triplet_iter()
            .map(|t| (t.row, t.col, t.val.to_bits()))
            .collect();
        let mut across: Vec<_> = along.iter().map(|&(i, j, v)| (j, i, v)).collect();
        along.sort_unstable();
        across.sort_unstable();
        prop_assert!(along == across, "{:?} is not symmetric", b.parameter);
        for k in 1..4u32 {
            let x = |i: usize| (i as f64 * f64::from(k) * 0.7).sin();
            let (mut form, mut size) = (0.0, 0.0);
            for t in b.matrix.triplet_iter() {
                form += x(t.row) * *t.val * x(t.col);
                size += (x(t.row) * *t.val * x(t.col)).abs();
            }
            prop_assert!(form >= -1e-12 * size, "{:?}: {form:e}", b.parameter);
        }
    }
    // A Cholesky factor exists for storage and conduction together: both are nowhere negative.
    let nodes = [system.size / 3, system.size / 2, system.size - 1];
    let mut ports: Vec<Functional> = system.wells.iter().chain(&system.gauges).cloned().collect();
    ports.extend(nodes.map(|i| Functional(vec![(i, 1.0)])));
    let (stored, let_out) = (times_one(system, true), times_one(system, false));
    for s in [1e-8, 1e-5, 1e-2] {
        let x = transfer(system, s, &ports);
        for (j, port) in ports.iter().enumerate() {
            // What came in is in store or has left through the edge.
            let entered: f64 = port.0.iter().map(|p| p.1).sum();
            let column =
                |rows: &[f64]| -> f64 { rows.iter().enumerate().map(|(i, r)| r * x[(i, j)]).sum() };
            let (kept, gone) = (s * column(&stored), column(&let_out));
            prop_assert!(
                (kept + gone - entered).abs() < 1e-10,
                "s {s:e} port {j}: kept {kept} gone {gone} entered {entered}"
            );
            if g.edge.kind == EdgeKind::Closed && g.stages.is_empty() {
                prop_assert!(gone.abs() < 1e-10, "{gone:e} left a closed ground");
            }
            for (i, other) in ports.iter().enumerate() {
                let (there, back) = (value(other, &x, j), value(port, &x, i));
                let scale = (value(port, &x, j) * value(other, &x, i)).abs().sqrt();
                prop_assert!(
                    (there - back).abs() <= 1e-9 * scale,
                    "{i} {j}: {there:e} {back:e}"
                );
            }
        }
    }
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 16, failure_persistence: None, ..ProptestConfig::default() })]
    #[test]
    fn any_ground_keeps_its_balance(g in any_ground(), pick in 0..4usize) {
        let d = discretise(&g, scheme(&g, pick), &COARSE);
        prop_assert!(d.is_ok(), "{}", d.err().unwrap());
        check(&g, &d.unwrap())?;
    }
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 4, failure_persistence: None, ..ProptestConfig::default() })]
    #[test]
    fn any_reduced_ground_is_passive(g in any_ground(), conduction in 0.5..2.0f64, storage in 0.5..2.0f64) {
        let d = discretise(&g, Scheme::Quadratic, &COARSE).unwrap();
        let options = ReduceOptions {
            max_shifts: 8,
            max_modes: 80,
            checked_times: 2,
            checked_nodes: 2,
            tolerance: 1e-2,
            ..ReduceOptions::default()
        };
        let reduced = reduce(&d.system, &[], &options).unwrap();
        for blocks in [&reduced.mass, &reduced.stiffness] {
            let total = blocks.iter().fold(None, |sum: Option<nalgebra::DMatrix<f64>>, b| {
                Some(sum.map_or_else(|| b.matrix.clone(), |s| s + &b.matrix))
            });
            let total = total.unwrap();
            prop_assert!((&total - total.transpose()).amax() <= 1e-12 * total.amax());
            let least = total.clone().symmetric_eigenvalues().min();
            prop_assert!(least >= -1e-11 * total.amax(), "{least:e}");
        }
        // As described, and at other parameters.
        let moved = vec![(Parameter::Transmissivity(0), conduction), (Parameter::Storativity(0), storage)];
        for factors in [Vec::new(), moved] {
            let modal = reduced.modal(&factors).unwrap();
            prop_assert!(modal.lambda.iter().all(|l| *l >= 0.0));
            // The power that enters at any mix of wells is never less than nothing, at any frequency.
            for omega in [1e-8, 1e-6, 1e-4, 1e-2] {
                let n = modal.wells.ncols();
                let real = nalgebra::DMatrix::from_fn(n, n, |i, j| {
                    (0..modal.lambda.len())
                        .map(|k| {
                            let l = modal.lambda[k];
                            modal.wells[(k, i)] * modal.wells[(k, j)] * l / (l * l + omega * omega)
                        })
                        .sum::<f64>()
                });
                let least = real.clone().symmetric_eigenvalues().min();
                prop_assert!(least >= -1e-12 * real.amax(), "{least:e}");
            }
        }
        let modal = reduced.modal(&Vec::new()).unwrap();
        // Each closed part has one mode that keeps for ever: what entered over the storage there is its mean pressure.
        prop_assert_eq!(reduced.closed, d.system.closed_components.len());
        prop_assert!(modal.lambda.rows(0, reduced.closed).iter().all(|l| *l == 0.0));
        let stored = times_one(&d.system, true);
        for (c, part) in d.system.closed_components.iter().enumerate() {
            let storage: f64 = part.iter().map(|&i| stored[i]).sum();
            for (w, port) in d.system.wells.iter().enumerate() {
                let entered: f64 = port.0.iter().filter(|p| part.contains(&p.0)).map(|p| p.1).sum();
                let kept = modal.wells[(c, w)] * storage.sqrt();
                prop_assert!((kept - entered).abs() < 1e-10, "part {c} well {w}: {kept} {entered}");
            }
        }
        // Reciprocity survives: a well's rate is felt at another as the other's at it.
        for i in 0..modal.wells.ncols() {
            let own = modal.step_response(modal.wells.column(i), modal.wells.column(i), 86_400.0);
            prop_assert!(own > 0.0);
            for j in 0..i {
                let there = modal.step_response(modal.wells.column(i), modal.wells.column(j), 86_400.0);
                let back = modal.step_response(modal.wells.column(j), modal.wells.column(i), 86_400.0);
                prop_assert!((there - back).abs() <= 1e-9 * own);
            }
        }
    }
}
