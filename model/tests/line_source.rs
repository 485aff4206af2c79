//! The discrete ground against the line source in an endless one.

mod support;

use std::f64::consts::PI;

use borewake_model::closed_form::{k0, line_source};
use borewake_model::ground::Seat;
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::weak_form::{Scheme, discretise};
use support::{S, T, three_wells, transfer, value};

const DAY: f64 = 86_400.0;

#[test]
fn quadratic_elements_on_three_wells_and_six_gauges() {
    let g = three_wells();
    let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    d.mesh.check().unwrap();
    println!("{:?} unknowns {}", d.mesh.quality(), d.system.size);
    assert!(d.system.size <= 30_000);
    let mut worst = 0.0f64;
    let ports = [d.system.wells.clone(), d.system.neighbours.clone()].concat();
    let at: Vec<_> = g
        .wells
        .iter()
        .map(|w| w.at)
        .chain(g.neighbours.iter().map(|n| n.at))
        .collect();
    for k in 0..10 {
        let s = (200.0 * DAY).recip() * (200.0f64 * 144.0).powf(f64::from(k) / 9.0);
        let x = transfer(&d.system, s, &ports);
        for (j, from) in at.iter().enumerate() {
            for (i, gauge) in d.system.gauges.iter().enumerate() {
                let (to, _) = g.gauge_at(i).unwrap();
                let own = matches!(g.gauges[i].seat, Seat::InWell(w) if w == j);
                let r = if own {
                    0.11
                } else {
                    (to[0] - from[0]).hypot(to[1] - from[1])
                };
                let exact = k0(r * (s * S / T).sqrt()) / (2.0 * PI * T);
                let peak = line_source(r, T, S, 200.0 * DAY);
                let error = (value(gauge, &x, j) - exact) / peak;
                if error.abs() > 1e-4 {
                    println!("s {s:.2e} from {j} at {i} r {r:.1}: {error:.2e}");
                }
                worst = worst.max(error.abs());
            }
        }
    }
    println!("worst {worst:.2e}");
    assert!(worst < 2e-4, "{worst:.2e}");
}
