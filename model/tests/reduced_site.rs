//! From a described site to its modes, end to end.

mod support;

use borewake_model::block::{RateKnown, RatePath};
use borewake_model::closed_form::line_source;
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{Barrier, Edge, EdgeKind, Patches, Seat, Zone};
use borewake_model::reduce::{Basis, BoxCorners, Propagator, ReduceOptions, reduce, spread};
use borewake_model::weak_form::{Parameter, Scheme, discretise};
use nalgebra::{DMatrix, DVector};
use support::{S, T, three_wells};

#[test]
fn every_gauge_of_an_open_site_shows_the_line_source() {
    let g = three_wells();
    let system = discretise(&g, Scheme::Quadratic, &MeshOptions::default())
        .unwrap()
        .system;
    let reduced = reduce(&system, &[], &ReduceOptions::default()).unwrap();
    let modal = reduced.modal(&Vec::new()).unwrap();
    let said = &reduced.certificate;
    println!("{said:?}");
    assert!(system.size <= 30_000 && modal.modes() <= 170);
    assert!(said.ports < 5e-5 && said.random_nodes < 2e-4, "{said:?}");
    assert!(said.leaks < 1e-3, "{said:?}");
    assert!(modal.lambda.iter().all(|&l| l > 0.0));
    for (w, well) in g.wells.iter().enumerate() {
        for i in 0..g.gauges.len() {
            let (to, _) = g.gauge_at(i).unwrap();
            let r = if matches!(g.gauges[i].seat, Seat::InWell(own) if own == w) {
                well.radius
            } else {
                (to[0] - well.at[0]).hypot(to[1] - well.at[1])
            };
            let (mut error, mut peak) = (0.0_f64, 0.0_f64);
            for k in 0..60 {
                // One minute to 365.25 days.
                let t = 60.0 * 525_960.0_f64.powf(f64::from(k) / 59.0);
                let exact = line_source(r, T, S, t);
                let found = modal.step_response(modal.gauges.column(i), modal.wells.column(w), t);
                error = error.max((found - exact).abs());
                peak = peak.max(exact);
            }
            assert!(
                error < 2e-4 * peak,
                "well {w} gauge {i}: {:.1e}",
                error / peak
            );
        }
    }
}

#[test]
fn a_hundred_and_fifty_modes_give_four_digits_at_any_node_and_two_hundred_and_twenty_five() {
    let mut g = three_wells();
    g.neighbours.clear();
    let system = discretise(&g, Scheme::Quadratic, &MeshOptions::default())
        .unwrap()
        .system;
    for (max_modes, max_shifts, tolerance, allowed) in
        [(150, 28, 1e-4, 1e-4), (220, 40, 1e-6, 1e-5)]
    {
        let options = ReduceOptions {
            max_modes,
            max_shifts,
            tolerance,
            checked_nodes: 60,
            ..ReduceOptions::default()
        };
        let reduced = reduce(&system, &[], &options).unwrap();
        let said = &reduced.certificate;
        println!("{said:?}");
        assert!(said.modes <= max_modes, "{said:?}");
        assert!(
            said.ports < allowed && said.random_nodes < allowed,
            "{said:?}"
        );
        assert!(said.leaks < 10.0 * allowed, "{said:?}");
    }
}

#[test]
fn a_closed_site_loses_nothing_in_ten_years_of_steps() {
    let mut g = three_wells();
    g.edge = Edge {
        kind: EdgeKind::Closed,
        distance: 6_000.0,
    };
    let coarse = MeshOptions {
        points_per_ring: 8,
        ..MeshOptions::default()
    };
    let system = discretise(&g, Scheme::Quadratic, &coarse).unwrap().system;
    let options = ReduceOptions {
        checked_times: 2,
        checked_nodes: 2,
        ..ReduceOptions::default()
    };
    let reduced = reduce(&system, &[], &options).unwrap();
    assert_eq!(reduced.closed, 1);
    let modal = reduced.modal(&Vec::new()).unwrap();
    let stored: f64 = system
        .mass
        .iter()
        .flat_map(|b| b.matrix.as_ref().triplet_iter().map(|t| *t.val))
        .sum();
    let disc = std::f64::consts::PI * 6_000.0_f64.powi(2) * S;
    assert!((stored / disc - 1.0).abs() < 0.05, "{stored:e} {disc:e}");
    let mut propagator = Propagator::new(&modal);
    let mut state = DVector::zeros(modal.modes());
    let mut shown = DMatrix::zeros(g.gauges.len(), 1);
    let (hour, mut entered) = (3600.0, 0.0);
    // Ten years of hours, with rates that come and go.
    for k in 0..87_660_u32 {
        let rates: Vec<RatePath> = (0..3)
            .map(|w| {
                let rate = 1e-3 * f64::from((k / 50 + w) % 5) - 5e-4;
                entered += rate * hour;
                RatePath {
                    pieces: vec![(hour, rate)],
                    known: RateKnown::Read,
                }
            })
            .collect();
        propagator
            .advance(&mut state, &rates, hour, &[hour], &mut shown)
            .unwrap();
    }
    // The first mode is the mean pressure times the root of the storage.
    let kept = state[0] * stored.sqrt();
    assert!((kept / entered - 1.0).abs() < 1e-10, "{kept} {entered}");
}

#[test]
fn the_certificate_of_a_fitted_ground_is_that_of_the_full_system_at_its_patches() {
    let g = three_wells();
    let coarse = MeshOptions {
        points_per_ring: 8,
        ..MeshOptions::default()
    };
    let discrete = discretise(&g, Scheme::Quadratic, &coarse).unwrap();
    let system = &discrete.system;
    let around = Patches {
        centre: [0.0, 300.0],
        half_width: 1500.0,
    };
    let patches = discrete.patches(&g, &around).unwrap();
    let options = ReduceOptions {
        checked_times: 4,
        checked_nodes: 10,
        ..ReduceOptions::default()
    };
    let basis = Basis::build(system, &options).unwrap();
    let reduced = basis.reduce(system, &patches, &[], &options).unwrap();
    let factors = vec![
        (Parameter::Transmissivity(0), 1.2),
        (Parameter::PatchTransmissivity(0, 12), 0.8),
        (Parameter::PatchTransmissivity(0, 7), 1.15),
        (Parameter::PatchStorativity(0, 4), 0.9),
    ];
    let fitted = basis
        .certify_at(system, &patches, &reduced, &options, &factors)
        .unwrap();
    println!("{fitted:?}");
    // Patches a fifth off are felt at first order by percents. States and adjoint states are both in the basis, so that ports are off
    // at second order only; nodes are at first.
    assert!(fitted.ports > 0.0 && fitted.ports < 4e-3, "{fitted:?}");
    assert!(fitted.random_nodes < 5e-2, "{fitted:?}");
    let described = basis
        .certify_at(system, &patches, &reduced, &options, &Vec::new())
        .unwrap();
    assert!(described.ports > 0.0 && described.ports <= reduced.certificate.ports);
}

#[test]
fn a_site_with_barrier_skin_and_storage_keeps_its_certificate_over_the_box() {
    let mut g = three_wells();
    g.wells[0].skin = 4.0;
    g.wells[0].storage = 2e-7;
    g.barriers = vec![Barrier {
        name: "fault".into(),
        line: vec![[-600.0, -900.0], [-200.0, 300.0], [-900.0, 1400.0]],
        conductance: 1e-12,
    }];
    let coarse = MeshOptions {
        points_per_ring: 8,
        ..MeshOptions::default()
    };
    let system = discretise(&g, Scheme::Quadratic, &coarse).unwrap().system;
    let options = ReduceOptions {
        checked_times: 5,
        corners: Some(BoxCorners {
            log_transmissivity: 0.5,
            log_storativity: 0.5,
        }),
        ..ReduceOptions::default()
    };
    let reduced = reduce(&system, &[], &options).unwrap();
    let said = &reduced.certificate;
    println!("{said:?}");
    assert!(said.ports < 2e-4, "{said:?}");
    assert!(said.box_corners.unwrap() < 2e-3, "{said:?}");
}

#[test]
fn the_spread_between_discretisations_brackets_the_error() {
    let found = spread(&three_wells(), &MeshOptions::default()).unwrap();
    println!("{found:?}");
    // The error against the line source is below 1e-4 of a peak on the finer mesh, and some percent for linear elements.
    assert!(found.sizes > 1e-5 && found.sizes < 6e-4, "{found:?}");
    assert!(
        found.schemes > found.sizes && found.schemes < 0.05,
        "{found:?}"
    );
    assert!(found.unknowns.1 < found.unknowns.0);
}

#[test]
fn a_zone_is_a_parameter_like_any_other() {
    let mut g = three_wells();
    g.zones = vec![Zone {
        name: "channel".into(),
        layer: 0,
        outline: vec![
            [250.0, -900.0],
            [1600.0, -700.0],
            [1900.0, 900.0],
            [900.0, 1300.0],
        ],
        transmissivity: 0.3 * T,
        storativity: S,
    }];
    let coarse = MeshOptions {
        points_per_ring: 8,
        ..MeshOptions::default()
    };
    let options = ReduceOptions {
        checked_times: 2,
        checked_nodes: 2,
        ..ReduceOptions::default()
    };
    let modal = |g: &_, factors| {
        let system = discretise(g, Scheme::Quadratic, &coarse).unwrap().system;
        let reduced = reduce(&system, &[], &options).unwrap();
        reduced.modal(&factors).unwrap()
    };
    let moved = modal(&g, vec![(Parameter::ZoneTransmissivity(0), 1.4)]);
    g.zones[0].transmissivity *= 1.4;
    let anew = modal(&g, Vec::new());
    for w in 0..g.wells.len() {
        for i in 0..g.gauges.len() {
            let at = |m: &borewake_model::reduce::Modal, t| {
                m.step_response(m.gauges.column(i), m.wells.column(w), t)
            };
            let peak = at(&anew, 3.156e7);
            for t in [3600.0, 86_400.0, 2.6e6, 3.156e7] {
                let error = (at(&moved, t) - at(&anew, t)) / peak;
                assert!(error.abs() < 5e-4, "well {w} gauge {i} t {t}: {error:.1e}");
            }
        }
    }
}
