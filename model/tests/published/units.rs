//! The constants of well testing in field units, as they follow from the site file's units.

use std::f64::consts::{LN_10, PI};

use borewake_model::units::Dimension as D;

const EULER: f64 = 0.577_215_664_901_532_9;

fn one(dimension: D, unit: &str) -> f64 {
    dimension.parse(&format!("1 {unit}")).unwrap()
}

fn close(found: f64, exact: f64) {
    assert!((found / exact - 1.0).abs() < 1e-12, "{found} for {exact}");
}

#[test]
fn constants_in_field_units_are_the_exact_ones() {
    // Earlougher 1977, SPE Monograph 5, prints the rounded ones; exact values from the SI definitions.
    let (psi, foot, hour) = (
        one(D::Pressure, "psi"),
        one(D::Length, "ft"),
        one(D::Time, "h"),
    );
    let steady =
        one(D::Rate, "bbl/d") * one(D::Viscosity, "cP") / (one(D::Permeability, "mD") * foot * psi);
    close(steady / (2.0 * PI), 141.205_455_522_552_8); // 141.2
    close(steady / (4.0 * PI), 70.602_727_761_276_38); // 70.6
    close(steady / (4.0 * PI) * LN_10, 162.568_788_467_831_9); // 162.6
    let eta = one(D::Permeability, "mD") * hour * psi / (one(D::Viscosity, "cP") * foot * foot);
    close(eta, 0.000_263_678_637_508_05); // 0.0002637
    close(24.0 * eta, 0.006_328_287_300_193_2); // 0.006328
    close(1.0 / (4.0 * eta), 948.123_831_201_025_7); // 948
    close(EULER.exp() / (4.0 * eta), 1_688.677_204_591_341); // 1688
    close((EULER.exp() / (4.0 * eta)).log10(), 3.227_546_640_889_776); // 3.2275
    close(4f64.ln() - EULER, 0.809_078_696_217_957_7); // 0.80907
    close((eta * (-EULER).exp()).sqrt(), 0.012_167_369_133_994_84); // 0.01217
    close(eta * (-EULER).exp(), 0.000_148_044_871_642_89); // 0.000148
    close((4.0 * eta).sqrt(), 0.032_476_369_101_736_19); // 0.03248
    close(4.0 * eta, 0.001_054_714_550_032); // 0.00105
    let barrel = one(D::Rate, "bbl/d") * 86_400.0 / foot.powi(3) / (2.0 * PI);
    close(barrel, 0.893_588_690_901_371); // 0.8936
    close(60.0 * barrel / eta, 203_335.855_952_476); // 200,000, with 3.5 times it, 12,000 a unit of skin
    close(3.5 * barrel / eta, 11_861.258_263_894_4);
    close(50.0 * barrel / eta, 169_446.546_627_06); // 170,000
    let slope = one(D::Rate, "bbl/d") * hour / foot.powi(3);
    close(slope, 0.233_940_972_222_222_2); // 0.2339
}
