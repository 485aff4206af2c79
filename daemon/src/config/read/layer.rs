//! `[[layer]]`: what a layer conducts and stores, stated or made of rock and fluid.

use borewake_model::fluid::{Fluid, brine};
use borewake_model::ground::{Anisotropy, Layer};
use borewake_model::units::{Dimension, significant};

use super::super::section::{At, Section};
use super::super::values::Sign;
use super::points::{sound_name, unique};

/// A layer with what other parts ask of it.
pub(super) struct LayerRead {
    pub(super) layer: Layer,
    pub(super) rock: Rock,
    top: Option<f64>,
}

/// What is stated of rock and fluid, SI; what is not may be made of the rest.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct Rock {
    permeability: Option<f64>,
    thickness: Option<f64>,
    porosity: Option<f64>,
    compressibility: Option<f64>,
    viscosity: Option<f64>,
    transmissivity: Option<f64>,
    storativity: Option<f64>,
    specific_storage: Option<f64>,
}

/// Keys by which transmissivity can be given.
const WAYS_T: [&[&str]; 2] = [
    &["transmissivity"],
    &["permeability", "thickness", "viscosity"],
];
/// Keys by which storativity can be given.
const WAYS_S: [&[&str]; 3] = [
    &["storativity"],
    &["specific_storage", "thickness"],
    &["porosity", "compressibility", "thickness"],
];

/// A total compressibility beyond which a gas phase is likelier than a soft rock \[1/Pa\]. Common practice, no source.
const GAS: f64 = 1e-7;

/// Reads every `[[layer]]`, top first.
pub(super) fn layers(root: &mut Section<'_>) -> Vec<LayerRead> {
    let mend =
        "a [[layer]] with name, permeability, thickness, porosity, compressibility and viscosity";
    let sections = root.must("layer", mend, |r, k| Some(r.list(k)));
    let mut layers: Vec<LayerRead> = Vec::new();
    let mut names: Vec<At<String>> = Vec::new();
    for mut section in sections.unwrap_or_default() {
        let name = sound_name(&mut section);
        if let Some(name) = name.clone() {
            unique(&section, "layer", &mut names, name);
        }
        let mut rock = Rock::stated(&mut section);
        let made = fluid(&mut section, &mut rock);
        let has = |key: &str| section.has(key) || made.contains(&key);
        one_way(&section, "transmissivity", &WAYS_T, has);
        one_way(&section, "storativity", &WAYS_S, has);
        let (transmissivity, storativity) = (rock.transmissivity(), rock.storativity());
        if let (Some(t), Some(s)) = (transmissivity, storativity) {
            plausible(&section, t / s);
        }
        let anisotropy = anisotropy(&mut section);
        let top = section.quantity("top", Dimension::Length, Sign::Any);
        let above = section.quantity("leakance_up", Dimension::Leakance, Sign::NotNegative);
        if let Some(leakance) = above {
            match layers.last_mut() {
                Some(upper) => upper.layer.leakance_below = Some(leakance.value),
                None => section.wrong(
                    "leakance_up",
                    &leakance,
                    "there is no layer above the first",
                    "list layers from the top down, or leave the key out",
                ),
            }
        }
        let upper_top = layers.last().and_then(|l| l.top);
        if let (Some(upper), Some(top)) = (upper_top, &top)
            && top.value >= upper
        {
            let what = "this layer starts above the one listed before it";
            section.wrong("top", top, what, "list layers from the top down");
        }
        section.close();
        layers.push(LayerRead {
            layer: Layer {
                name: name.map(|n| n.value).unwrap_or_default(),
                transmissivity: transmissivity.unwrap_or(1.0),
                storativity: storativity.unwrap_or(1.0),
                anisotropy,
                leakance_below: None,
            },
            rock,
            top: top.map(|t| t.value),
        });
    }
    layers
}

impl Rock {
    /// Reads the keys that are there.
    pub(super) fn stated(section: &mut Section<'_>) -> Self {
        use Dimension as D;
        let positive = |s: &mut Section<'_>, key, dimension| {
            s.quantity(key, dimension, Sign::Positive).map(|q| q.value)
        };
        let porosity = section.quantity("porosity", D::Ratio, Sign::Positive);
        if let Some(phi) = &porosity
            && phi.value >= 1.0
        {
            let what = "a porosity is a share of the rock, below one";
            section.wrong("porosity", phi, what, "such as 0.21 or \"21 %\"");
        }
        let rock = Self {
            permeability: positive(section, "permeability", D::Permeability),
            thickness: positive(section, "thickness", D::Length),
            porosity: porosity.map(|p| p.value),
            compressibility: positive(section, "compressibility", D::Compressibility),
            viscosity: positive(section, "viscosity", D::Viscosity),
            transmissivity: positive(section, "transmissivity", D::Transmissivity),
            storativity: positive(section, "storativity", D::Storativity),
            specific_storage: positive(section, "specific_storage", D::SpecificStorage),
        };
        if rock.compressibility.is_some_and(|c| c > GAS) {
            let text = "so large a compressibility is that of a gas: the model takes one phase, slightly compressible";
            let key = section.key("compressibility");
            section
                .report
                .note(&section.value_span("compressibility"), key, text);
        }
        rock
    }

    /// Transmissivity \[m3/(Pa s)\], stated or made.
    pub(super) fn transmissivity(&self) -> Option<f64> {
        let made = || Some(self.permeability? * self.thickness? / self.viscosity?);
        self.transmissivity.or_else(made)
    }

    /// Storativity \[m/Pa\], stated or made.
    pub(super) fn storativity(&self) -> Option<f64> {
        let of_rock = || Some(self.porosity? * self.compressibility?);
        let made = || Some(self.specific_storage.or_else(of_rock)? * self.thickness?);
        self.storativity.or_else(made)
    }

    /// What is stated here, and of the rest what `other` states. What is stated here as a whole replaces its parts there.
    pub(super) fn over(&self, other: &Self) -> Self {
        let conducts = self.permeability.or(self.viscosity).is_some();
        let stores = self.porosity.or(self.compressibility).is_some();
        let thicker = self.thickness.is_some();
        let keep = |value: Option<f64>, replaced: bool| value.filter(|_| !replaced);
        Self {
            permeability: self.permeability.or(other.permeability),
            thickness: self.thickness.or(other.thickness),
            porosity: self.porosity.or(other.porosity),
            compressibility: self.compressibility.or(other.compressibility),
            viscosity: self.viscosity.or(other.viscosity),
            transmissivity: self
                .transmissivity
                .or(keep(other.transmissivity, conducts || thicker)),
            specific_storage: self
                .specific_storage
                .or(keep(other.specific_storage, stores)),
            storativity: self.storativity.or(keep(
                other.storativity,
                stores || thicker || self.specific_storage.is_some(),
            )),
        }
    }
}

/// Reads `fluid` and `rock_compressibility`, fills in what they give, and names the keys that they stand for.
fn fluid(section: &mut Section<'_>, rock: &mut Rock) -> Vec<&'static str> {
    let pores = section.quantity(
        "rock_compressibility",
        Dimension::Compressibility,
        Sign::Positive,
    );
    let Some(mut table) = section.table("fluid") else {
        if pores.is_some() {
            section.report.place(
                &section.key_span("rock_compressibility"),
                section.key("rock_compressibility"),
                "the compressibility of the pores alone is not the layer's",
                "add fluid = { temperature = \"60 degC\", pressure = \"15 MPa\", salinity = \"3 %\" }, or give `compressibility`",
            );
        }
        return Vec::new();
    };
    let temperature = table.must("temperature", "temperature = \"60 degC\"", |t, k| {
        t.quantity(k, Dimension::Temperature, Sign::Any)
    });
    let pressure = table.must("pressure", "pressure = \"15 MPa\"", |t, k| {
        t.quantity(k, Dimension::Pressure, Sign::Positive)
    });
    let salinity = table.quantity("salinity", Dimension::Ratio, Sign::NotNegative);
    table.close();
    let mut made = vec!["viscosity"];
    if pores.is_some() {
        made.push("compressibility");
    }
    let (Some(temperature), Some(pressure)) = (temperature, pressure) else {
        return made;
    };
    let salinity = salinity.map_or(0.0, |s| s.value);
    match brine(temperature.value, pressure.value, salinity) {
        Ok(found) => fill(section, rock, &found, pores),
        Err(why) => section.report.value(
            &section.value_span("fluid"),
            section.key("fluid"),
            format!("the formulas for water and brine do not reach it: {why}"),
            "mend it, or leave `fluid` out and give `viscosity` and `compressibility`",
        ),
    }
    made
}

/// Takes viscosity and compressibility from the fluid where they are not stated, and notes where they disagree.
fn fill(section: &Section<'_>, rock: &mut Rock, fluid: &Fluid, pores: Option<At<f64>>) {
    if let Some(stated) = rock.viscosity
        && !(0.8..1.25).contains(&(stated / fluid.viscosity))
    {
        let text = format!(
            "the fluid described would have {} cP: what is stated here holds",
            significant(1e3 * fluid.viscosity, 3)
        );
        let key = section.key("viscosity");
        section
            .report
            .note(&section.value_span("viscosity"), key, text);
    }
    rock.viscosity = rock.viscosity.or(Some(fluid.viscosity));
    match (rock.compressibility, pores) {
        (Some(_), Some(pores)) => section.wrong(
            "rock_compressibility",
            &pores,
            "`compressibility` is that of rock and fluid together",
            "keep one of the two",
        ),
        (None, Some(pores)) => {
            rock.compressibility = Some(fluid.compressibility + pores.value);
        }
        _ => {}
    }
}

/// Reads `anisotropy`: how much more readily the layer conducts along one direction than across it.
fn anisotropy(section: &mut Section<'_>) -> Option<Anisotropy> {
    let mut table = section.table("anisotropy")?;
    let ratio = table.must("ratio", "ratio = 4", |t, k| t.number(k));
    let azimuth = table.must(
        "azimuth",
        "azimuth = \"30 deg\", clockwise from north, of the direction that conducts best",
        |t, k| t.quantity(k, Dimension::Angle, Sign::Any),
    );
    if let Some(ratio) = &ratio
        && !(1.0..=100.0).contains(&ratio.value)
    {
        table.wrong(
            "ratio",
            ratio,
            "the greatest transmissivity over the least lies from 1 to 100",
            "give the direction that conducts best as the azimuth",
        );
    }
    table.close();
    Some(Anisotropy {
        ratio: ratio?.value,
        direction: std::f64::consts::FRAC_PI_2 - azimuth?.value,
    })
}

/// Reports a quantity of which no way to give it is complete, or that is given in more ways than one.
fn one_way(section: &Section<'_>, what: &str, ways: &[&[&str]], has: impl Fn(&str) -> bool) {
    // The thickness serves several quantities, and the fluid's may: they start no way.
    let starts = |way: &&&[&str]| way.iter().any(|k| *k != "thickness" && section.has(k));
    let quoted = |keys: Vec<&str>| {
        let keys: Vec<String> = keys.into_iter().map(|k| format!("`{k}`")).collect();
        keys.join(", ")
    };
    let started: Vec<&[&str]> = ways.iter().filter(starts).copied().collect();
    let report = section.report;
    match started.as_slice() {
        [] => {
            let ways: Vec<String> = ways.iter().map(|w| quoted(w.to_vec())).collect();
            report.missing(
                &section.span,
                section.whole(),
                format!("the {what} is not known"),
                format!("give {}", ways.join("; or ")),
            );
        }
        [way] => {
            let missing = quoted(way.iter().filter(|k| !has(k)).copied().collect());
            if !missing.is_empty() {
                report.missing(
                    &section.span,
                    section.whole(),
                    format!("the {what} is not known"),
                    format!("add {missing}"),
                );
            }
        }
        several => {
            let given = several.iter().flat_map(|w| w.iter().copied());
            let given: Vec<&str> = given
                .filter(|k| *k != "thickness" && section.has(k))
                .collect();
            let last = given.last().copied().unwrap_or_default();
            report.place(
                &section.key_span(last),
                section.whole(),
                format!("the {what} is given more than once: {}", quoted(given)),
                "keep one way of giving it",
            );
        }
    }
}

/// Notes a diffusivity that no ground is known to have. Compilations of confined aquifers give 0.012 to 8914 m2/s; this
/// leaves a wide margin on both sides.
pub(super) fn plausible(section: &Section<'_>, diffusivity: f64) {
    if !(1e-5..1e5).contains(&diffusivity) {
        let text = format!(
            "its diffusivity comes out as {diffusivity:.2e} m2/s, which no ground is known to have: check the units"
        );
        section.report.note(&section.span, section.whole(), text);
    }
}
