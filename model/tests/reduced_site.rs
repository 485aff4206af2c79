//! From a described site to its modes, end to end.

mod support;

use borewake_model::closed_form::line_source;
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{Barrier, Seat, Zone};
use borewake_model::reduce::{BoxCorners, ReduceOptions, reduce, spread};
use borewake_model::weak_form::{Parameter, Scheme, discretise};
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
    assert!(said.ports < 5e-5 && said.random_nodes < 5e-4, "{said:?}");
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
