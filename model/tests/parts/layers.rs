//! Wells open to several layers. Without crossflow in the ground the layers take the rate side by side: their
//! admittances add (Lefkovits, Hazebroek, Allen & Matthews 1961, SPEJ 1; from memory).

use borewake_model::closed_form::{Bore, bore_transfer, invert};
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{EdgeKind, Ground, Layer, Seat};
use borewake_model::reduce::{ReduceOptions, reduce};
use borewake_model::weak_form::{Functional, Parameter, Scheme, SparseBlock, discretise};
use nalgebra::Complex;

use crate::support::{S, T, gauge, ground, layer, transfer, value, well};

const RADIUS: f64 = 0.11;

/// One well open to two layers that are apart elsewhere, each given by factors on `T` and `S`.
fn two_layers(upper: (f64, f64), lower: (f64, f64), skin: f64, storage: f64) -> Ground {
    let mut g = ground(EdgeKind::Open, 25_000.0);
    let made = |name: &str, (t, s): (f64, f64)| Layer {
        name: name.into(),
        transmissivity: t * T,
        storativity: s * S,
        ..layer()
    };
    g.layers = vec![made("upper", upper), made("lower", lower)];
    let mut w = well("W", [0.0, 0.0]);
    (w.also, w.skin, w.storage) = (vec![1], skin, storage);
    g.wells = vec![w];
    g.gauges = vec![gauge("W", Seat::InWell(0))];
    g
}

/// Pressure in the bore over rate, as transforms.
fn commingled(g: &Ground, s: Complex<f64>) -> Complex<f64> {
    let well = &g.wells[0];
    let bore = Bore {
        radius: RADIUS,
        skin: well.skin,
        storage: 0.0,
    };
    let taken = g
        .layers
        .iter()
        .map(|l| bore_transfer(&bore, l.transmissivity, l.storativity, s).inv());
    (taken.sum::<Complex<f64>>() + s * well.storage).inv()
}

#[test]
fn layers_of_one_diffusivity_act_as_one_and_share_by_transmissivity() {
    let g = two_layers((1.0, 1.0), (0.4, 0.4), 0.0, 0.0);
    let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    let bore = Bore {
        radius: RADIUS,
        skin: 0.0,
        storage: 0.0,
    };
    for s in [1e-7, 1e-5, 1e-3] {
        let x = transfer(&d.system, s, &d.system.wells);
        let found = value(&d.system.wells[0], &x, 0);
        let one = bore_transfer(&bore, 1.4 * T, 1.4 * S, Complex::new(s, 0.0)).re;
        assert!((found / one - 1.0).abs() < 2e-4, "{s:e}: {}", found / one);

        // What a layer takes: its own storage and conduction at the node of the bore.
        let Functional(port) = &d.system.wells[0];
        let taken = |l: usize| {
            let row = |blocks: &[SparseBlock], of: Parameter| -> f64 {
                let own = blocks.iter().filter(|b| b.parameter == of);
                own.flat_map(|b| b.matrix.triplet_iter())
                    .filter(|t| t.row == port[0].0)
                    .map(|t| *t.val * x[(t.col, 0)])
                    .sum()
            };
            row(&d.system.stiffness, Parameter::Transmissivity(l))
                + s * row(&d.system.mass, Parameter::Storativity(l))
        };
        let (upper, lower) = (taken(0), taken(1));
        assert!((upper + lower - 1.0).abs() < 1e-9);
        assert!((upper - 1.0 / 1.4).abs() < 1e-9, "{upper}");
    }
}

#[test]
fn the_split_tends_to_the_shares_of_transmissivity() {
    // The lower layer is forty times slower: it takes more at first, and its share of transmissivity in the end.
    let g = two_layers((1.0, 1.0), (0.5, 20.0), 0.0, 0.0);
    let share = |s: f64| {
        let bore = Bore {
            radius: RADIUS,
            skin: 0.0,
            storage: 0.0,
        };
        let s = Complex::new(s, 0.0);
        (commingled(&g, s) / bore_transfer(&bore, 0.5 * T, 20.0 * S, s)).re
    };
    let d = discretise(&g, Scheme::Quadratic, &MeshOptions::default()).unwrap();
    for s in [1e-7, 1e-4] {
        let x = transfer(&d.system, s, &d.system.wells);
        let found = value(&d.system.wells[0], &x, 0);
        let exact = commingled(&g, Complex::new(s, 0.0)).re;
        assert!(
            (found / exact - 1.0).abs() < 2e-4,
            "{s:e}: {}",
            found / exact
        );
    }
    assert!(share(1e-1) > 0.45 && (share(1e-12) - 1.0 / 3.0).abs() < 0.05);
}

#[test]
fn skin_and_storage_of_unlike_layers_follow_the_commingled_solution() {
    for (skin, storage) in [(3.0, 0.0), (3.0, 2e-7), (-2.0, 0.0)] {
        let g = two_layers((1.0, 1.0), (0.3, 3.0), skin, storage);
        let system = discretise(&g, Scheme::Quadratic, &MeshOptions::default())
            .unwrap()
            .system;
        let reduced = reduce(&system, &[], &ReduceOptions::default()).unwrap();
        assert!(
            reduced.certificate.ports < 1e-4,
            "{:?}",
            reduced.certificate
        );
        let modal = reduced.modal(&Vec::new()).unwrap();
        let own = modal.gauges.column(0);
        let exact = |t: f64| invert(t, |s| commingled(&g, s) / s);
        let peak = exact(3.156e7);
        for t in [60.0, 600.0, 3_600.0, 86_400.0, 2.6e6, 3.156e7] {
            let found = modal.step_response(own, modal.wells.column(0), t);
            let error = (found - exact(t)) / peak;
            assert!(
                error.abs() < 4e-4,
                "skin {skin} storage {storage:e} t {t}: {error:.1e}"
            );
        }
    }
}
