//! The exponential integral, which hydrogeologists call the well function.

/// Euler's constant.
pub(super) const EULER: f64 = 0.577_215_664_901_532_9;

/// `E1(x)`, the integral of `exp(-u)/u` from `x` to infinity, for `x > 0`.
///
/// Relative error below 1e-13: power series up to one, beyond it the continued fraction by Lentz's
/// method (Abramowitz & Stegun 1964, 5.1.11 and 5.1.22). Zero or less gives infinity, `NaN` stays.
#[must_use]
pub fn e1(x: f64) -> f64 {
    if x.is_nan() {
        f64::NAN
    } else if x <= 0.0 {
        f64::INFINITY
    } else if x <= 1.0 {
        series(x)
    } else {
        fraction(x)
    }
}

fn series(x: f64) -> f64 {
    let (mut term, mut sum, mut k) = (1.0, 0.0, 0.0);
    loop {
        k += 1.0;
        term *= -x / k;
        let add = term / k;
        sum -= add;
        if add.abs() < 1e-18 {
            return -EULER - x.ln() + sum;
        }
    }
}

fn fraction(x: f64) -> f64 {
    // E1(x) = exp(-x) / (x + 1 - 1 / (x + 3 - 4 / (x + 5 - ...))).
    let mut b = x + 1.0;
    let mut c = f64::MAX;
    let mut d = 1.0 / b;
    let mut h = d;
    let mut i = 0.0;
    // At x = 1, the slowest case, sixty terms settle it; far fewer beyond.
    while i < 200.0 {
        i += 1.0;
        let a = -i * i;
        b += 2.0;
        d = 1.0 / (a * d + b);
        c = b + a / c;
        let step = c * d;
        h *= step;
        if (step - 1.0).abs() < 1e-16 {
            break;
        }
    }
    h * (-x).exp()
}

#[cfg(test)]
mod tests {
    use super::e1;

    #[test]
    fn agrees_with_the_exact_well_function() {
        // Arguments of Wenzel's table (1942, USGS WSP 887); values in arbitrary precision.
        for (u, exact) in TABLE {
            assert!((e1(u) - exact).abs() <= 1e-9 * exact, "E1({u})");
            assert!(
                (e1(u) - exact).abs() <= 1e-12 * exact,
                "E1({u}) {:e}",
                e1(u) / exact - 1.0
            );
        }
    }

    #[test]
    fn meets_itself_where_the_methods_change() {
        assert!((super::series(1.0) - super::fraction(1.0)).abs() < 1e-14);
    }

    const TABLE: [(f64, f64); 30] = [
        (1e-15, 33.96156073000915),
        (1e-14, 31.65897563701512),
        (1e-13, 29.35639054402116),
        (1e-12, 27.05380545102802),
        (1e-11, 24.75122035804297),
        (1e-10, 22.44863526513892),
        (1e-9, 20.14605017304488),
        (1e-8, 17.84346508905083),
        (1e-7, 15.54088008605678),
        (1e-6, 13.23829589306249),
        (1e-5, 10.9357198000437),
        (1e-4, 8.633224704574705),
        (1e-3, 6.331539364136149),
        (5e-3, 4.726095458584443),
        (1e-2, 4.037929576538114),
        (2e-2, 3.35470778330971),
        (5e-2, 2.467898488509974),
        (1e-1, 1.822923958419391),
        (2e-1, 1.222650544183893),
        (5e-1, 0.5597735947761608),
        (1.0, 0.2193839343955203),
        (2.0, 0.04890051070806112),
        (3.0, 0.01304838109419704),
        (4.0, 0.003779352409848906),
        (5.0, 0.001148295591275326),
        (6.0, 0.0003600824521626587),
        (7.0, 0.0001154817316103382),
        (8.0, 3.76656228439249e-5),
        (9.0, 1.244735417800627e-5),
        (9.9, 4.636887757134862e-6),
    ];
}
