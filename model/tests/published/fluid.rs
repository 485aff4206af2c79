//! Water against tables of the international formulations.

use borewake_model::fluid::water;

use crate::rows;

#[test]
fn water_in_full() {
    let table: Vec<[f64; 8]> = rows(include_str!("data/water.csv"));
    assert_eq!(table.len(), 66);
    for [
        t,
        mpa,
        density,
        scientific,
        viscosity,
        library,
        compressibility,
        sound,
    ] in table
    {
        let found = water(t, mpa * 1e6).unwrap();
        let close = |found: f64, exact: f64, share: f64, what: &str| {
            assert!(
                (found / exact - 1.0).abs() < share,
                "{what} at {t} degC {mpa} MPa: {found} for {exact}"
            );
        };
        close(found.density, density, 1e-8, "density");
        close(found.density, scientific, 2e-5, "density by IAPWS-95");
        close(found.viscosity * 1e6, viscosity, 1e-4, "viscosity");
        close(found.viscosity * 1e6, library, 1e-4, "viscosity");
        close(
            found.compressibility,
            compressibility,
            5e-3,
            "compressibility",
        );
        // Isothermal compressibility is the adiabatic one, 1/(density c^2), or up to some percent more when hot.
        let adiabatic = (density * sound * sound).recip();
        let ratio = found.compressibility / adiabatic;
        assert!(
            (0.994..1.15).contains(&ratio),
            "{t} degC {mpa} MPa: {ratio}"
        );
    }
}
