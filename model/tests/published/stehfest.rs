//! The inversion of Stehfest as a second opinion on the contour's, and how far short of it it falls.

use borewake_model::closed_form::{Bore, bore_transfer, invert_with_error};
use nalgebra::Complex;

use crate::rows;

/// Weights of Stehfest 1970, Comm. ACM 13, algorithm 368, for an even number of terms.
fn weights(n: u32) -> Vec<f64> {
    let factorial = |k: u32| (1..=k).map(f64::from).product::<f64>();
    let half = n / 2;
    (1..=n)
        .map(|i| {
            let sum: f64 = (i.div_ceil(2)..=i.min(half))
                .map(|k| {
                    f64::from(k).powi(i32::try_from(half).unwrap()) * factorial(2 * k)
                        / factorial(half - k)
                        / factorial(k)
                        / factorial(k - 1)
                        / factorial(i - k)
                        / factorial(2 * k - i)
                })
                .sum();
            if (i + half).is_multiple_of(2) {
                sum
            } else {
                -sum
            }
        })
        .collect()
}

#[test]
fn weights_are_the_exact_ones() {
    let mut seen = 0;
    for line in include_str!("data/stehfest.csv").lines() {
        let cells: Vec<&str> = line.split(',').collect();
        let (Ok(n), Ok(i)) = (cells[0].parse::<u32>(), cells[1].parse::<usize>()) else {
            continue;
        };
        let (top, bottom) = cells[2].split_once('/').unwrap_or((cells[2], "1"));
        let exact = top.parse::<f64>().unwrap() / bottom.parse::<f64>().unwrap();
        let found = weights(n)[i - 1];
        assert!(
            (found / exact - 1.0).abs() < 1e-12,
            "N {n} i {i}: {found} {exact}"
        );
        seen += 1;
    }
    assert_eq!(seen, 66);
}

#[test]
fn the_contour_is_finer_than_twelve_terms_and_tells_its_error() {
    let t = 1.0 / (2.0 * std::f64::consts::PI);
    let (mut contour, mut told, mut terms) = (0.0f64, 0.0f64, 0.0f64);
    let twelve = weights(12);
    for [cd, skin, td, exact, _] in rows(include_str!("data/storage_and_skin.csv")) {
        let bore = Bore {
            radius: 1.0,
            skin,
            storage: cd,
        };
        let transform = |s: Complex<f64>| bore_transfer(&bore, t, t, s) / s;
        let (found, error) = invert_with_error(td, transform);
        // The table has twelve digits.
        assert!(
            (found - exact).abs() <= error + 1e-11 * exact,
            "CD {cd} S {skin} tD {td}: told {error:e}"
        );
        contour = contour.max((found - exact).abs() / exact);
        told = told.max(error / exact);
        let rate = std::f64::consts::LN_2 / td;
        let sum: f64 = twelve
            .iter()
            .zip(1..)
            .map(|(w, i)| w * transform(Complex::new(f64::from(i) * rate, 0.0)).re)
            .sum();
        terms = terms.max((sum * rate - exact).abs() / exact);
    }
    println!("contour {contour:.1e} told {told:.1e}, twelve terms {terms:.1e}");
    assert!(contour < 1e-7 && told < 1e-5);
    assert!(terms > 1e-4 && terms < 2e-3, "{terms:e}");
}
