//! Superposition and images against exact values.

use borewake_model::closed_form::{Line, beside_line, line_source, superpose};

// Heads in metres, T = 1e-3 m2/s, S = 1e-4, r = 50 m: the same formula in other units.
const T: f64 = 1e-3;
const S: f64 = 1e-4;

#[test]
fn steps_of_rate_and_recovery() {
    // Superposition of line sources (Theis 1935) in arbitrary precision.
    let path = [
        (0.0, 0.005),
        (7200.0, 0.008),
        (14_400.0, 0.012),
        (21_600.0, 0.0),
    ];
    for (t, exact) in [
        (60.0, 0.0814367365357),
        (600.0, 0.710651893265),
        (3600.0, 1.39005646851),
        (7200.0, 1.66241947075),
        (7260.0, 1.71455507993),
        (7800.0, 2.12039401054),
        (10800.0, 2.65663565189),
        (14400.0, 2.93394432065),
        (14460.0, 3.00270511967),
        (18000.0, 4.23054015888),
        (21600.0, 4.58907863078),
        (21660.0, 4.39833820442),
        (22200.0, 2.9293556185),
        (25200.0, 1.49532407324),
        (28800.0, 1.02916093491),
        (43200.0, 0.488236200721),
        (86400.0, 0.195740518339),
    ] {
        let found = superpose(&path, t, |t| line_source(50.0, T, S, t));
        assert!((found - exact).abs() < 1e-10, "{t}: {found} {exact}");
    }
}

#[test]
fn images_behind_a_sealed_and_a_held_line() {
    // Method of Ferris et al. 1962, USGS WSP 1536-E, in arbitrary precision: 0.01 m3/s, the line 250 m off.
    let line = ([250.0, -10.0], [250.0, 40.0]);
    for (t, endless, barrier, recharge) in [
        (60.0, 0.162873473071, 0.162873473071, 0.162873473071),
        (300.0, 0.946467590429, 0.946467592523, 0.946467588335),
        (600.0, 1.42130378653, 1.4213222252, 1.42128534786),
        (1800.0, 2.24216118828, 2.25535999347, 2.22896238309),
        (3600.0, 2.78011293702, 2.87172594903, 2.688499925),
        (7200.0, 3.32483894149, 3.62051725606, 3.02916062692),
        (14400.0, 3.87298527641, 4.50250590767, 3.24346464516),
        (28800.0, 4.42285014275, 5.48095028548, 3.36475000003),
        (43200.0, 4.74493389676, 6.08231777685, 3.40755001668),
        (86400.0, 5.29594756212, 7.14028125794, 3.4516138663),
        (172800.0, 5.84724881695, 8.2203623739, 3.47413526),
        (604800.0, 6.84396034735, 10.1974940833, 3.49042661145),
    ] {
        let at = |f: f64, exact: f64| assert!((0.01 * f - exact).abs() < 1e-10, "{t}: {f} {exact}");
        at(line_source(50.0, T, S, t), endless);
        let beside = |kind, x| beside_line(kind, line, ([0.0, 0.0], [x, 0.0]), T, S, t);
        at(beside(Line::Sealed, 50.0), barrier);
        at(beside(Line::Held, 50.0), recharge);
        at(beside(Line::Sealed, 300.0), 0.0);
        at(beside(Line::Held, 250.0), 0.0);
    }
}
