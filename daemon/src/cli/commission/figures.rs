//! Fitted figures with their intervals, in the site's units and SI, and in words what history could not tell apart.

use borewake_model::commission::{Account, Calibration, Figure, Known, Rival};
use borewake_model::ground::Seat;
use borewake_model::units::{Dimension, UnitSystem, significant};
use borewake_model::weak_form::Parameter;
use serde_json::{Value, json};

use crate::config::Site;

/// Standard deviations either side that hold 95 % of a normal distribution.
const INTERVAL: f64 = 1.959_964;
/// From this share of the prior's standard deviation on history has said nothing.
const UNMOVED: f64 = 0.9;
/// From this share of the prior's standard deviation on it has said little.
const LITTLE: f64 = 0.3;
/// From this share of its variance on a figure of which history said little cannot be told from another.
const UNTOLD: f64 = 0.8;

/// What stands in place of a number.
pub(crate) const NOT_SEEN: &str = "not seen by any gauge";

/// A fitted figure.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Row {
    /// Its name for people.
    pub(crate) name: String,
    /// Its kind; a skin is a plain number.
    pub(crate) dimension: Option<Dimension>,
    /// What the site file says, SI.
    pub(crate) described: f64,
    /// Fitted value and the ends of its 95 % interval, SI; `None` where no gauge sees it.
    pub(crate) fitted: Option<[f64; 3]>,
}

impl Row {
    /// The unit the figure is shown in; empty for plain numbers.
    pub(crate) fn unit(&self, units: UnitSystem) -> &'static str {
        match (self.dimension, units) {
            (None, _) => "",
            (Some(Dimension::Transmissivity), UnitSystem::Metric) => "mD m/cP",
            (Some(Dimension::Storativity), UnitSystem::Metric) => "m/kPa",
            (Some(dimension), _) => units.unit(dimension),
        }
    }

    /// The SI unit.
    pub(crate) fn si_unit(&self) -> &'static str {
        self.dimension
            .map_or("", |d| UnitSystem::Metric.unit(d).trim())
    }

    /// An SI value in the unit shown, as text.
    pub(crate) fn shown(&self, units: UnitSystem, si: f64) -> String {
        let Some(dimension) = self.dimension else {
            return format!("{si:.2}");
        };
        let unit = self.unit(units);
        let number = dimension
            .conversion(unit)
            .map_or(f64::NAN, |c| c.from_si(si));
        significant(number, 4)
    }

    /// An SI value as text.
    pub(crate) fn si(&self, value: f64) -> String {
        match self.dimension {
            None => String::new(),
            Some(_) => significant(value, 4),
        }
    }
}

/// All figures: parameters in the calibration's order, then the skin of every well.
pub(crate) fn rows(site: &Site, calibration: &Calibration) -> Vec<Row> {
    let mut rows: Vec<Row> = calibration
        .factors
        .iter()
        .zip(&calibration.factor_sd)
        .map(|(&(parameter, factor), &sd)| parameter_row(site, parameter, factor, sd))
        .collect();
    let fitted_as_parameter = |well: usize| {
        let parameter = Parameter::Skin(well);
        calibration.factors.iter().any(|(p, _)| *p == parameter)
    };
    let skins = calibration.skins.iter().zip(&calibration.skin_sd);
    for (index, (well, (&skin, &sd))) in site.ground.wells.iter().zip(skins).enumerate() {
        if fitted_as_parameter(index) {
            continue;
        }
        let seen = has_gauge(site, index);
        let half = INTERVAL * sd;
        rows.push(Row {
            name: format!("skin of {}", well.name),
            dimension: None,
            described: well.skin,
            fitted: seen.then_some([skin, skin - half, skin + half]),
        });
    }
    rows
}

/// One parameter, fitted as a factor whose logarithm has a standard deviation.
pub(crate) fn parameter_row(site: &Site, parameter: Parameter, factor: f64, sd: f64) -> Row {
    let (name, dimension, described) = describe(site, parameter);
    let spread = (INTERVAL * sd).exp();
    let [low, high] = [factor / spread, factor * spread];
    // The factor is on the conductance of a skin, so the skin goes the other way.
    let fitted = match parameter {
        Parameter::Skin(_) => [described / factor, described / high, described / low],
        _ => [factor, low, high].map(|f| f * described),
    };
    Row {
        name,
        dimension,
        described,
        fitted: Some(fitted),
    }
}

/// Whether a gauge sits in a well's own bore.
fn has_gauge(site: &Site, well: usize) -> bool {
    let gauges = &site.ground.gauges;
    gauges.iter().any(|g| g.seat == Seat::InWell(well))
}

/// Name, kind and described value of a parameter.
fn describe(site: &Site, parameter: Parameter) -> (String, Option<Dimension>, f64) {
    let ground = &site.ground;
    let layer = |i: usize| ground.layers.get(i).map_or("a layer", |l| l.name.as_str());
    let zone = |i: usize| ground.zones.get(i).map_or("a zone", |z| z.name.as_str());
    let well = |i: usize| ground.wells.get(i).map_or("a well", |w| w.name.as_str());
    let of_layer = |i: usize, value: fn(&borewake_model::ground::Layer) -> f64| {
        ground.layers.get(i).map_or(f64::NAN, value)
    };
    match parameter {
        Parameter::Transmissivity(i) => (
            format!("T of {}", layer(i)),
            Some(Dimension::Transmissivity),
            of_layer(i, |l| l.transmissivity),
        ),
        Parameter::Storativity(i) => (
            format!("S of {}", layer(i)),
            Some(Dimension::Storativity),
            of_layer(i, |l| l.storativity),
        ),
        Parameter::ZoneTransmissivity(i) => (
            format!("T of {}", zone(i)),
            Some(Dimension::Transmissivity),
            ground.zones.get(i).map_or(f64::NAN, |z| z.transmissivity),
        ),
        Parameter::ZoneStorativity(i) => (
            format!("S of {}", zone(i)),
            Some(Dimension::Storativity),
            ground.zones.get(i).map_or(f64::NAN, |z| z.storativity),
        ),
        Parameter::Leakance(i) => (
            format!("leakance below {}", layer(i)),
            Some(Dimension::Leakance),
            of_layer(i, |l| l.leakance_below.unwrap_or(f64::NAN)),
        ),
        Parameter::Barrier(i) => {
            let barrier = ground.barriers.get(i);
            (
                format!(
                    "conductance of {}",
                    barrier.map_or("a barrier", |b| b.name.as_str())
                ),
                Some(Dimension::Conductance),
                barrier.map_or(f64::NAN, |b| b.conductance),
            )
        }
        Parameter::Skin(i) => (
            format!("skin of {}", well(i)),
            None,
            ground.wells.get(i).map_or(f64::NAN, |w| w.skin),
        ),
        Parameter::Storage(i) => (
            format!("storage in {}", well(i)),
            Some(Dimension::Storage),
            ground.wells.get(i).map_or(f64::NAN, |w| w.storage),
        ),
        Parameter::Stage(i) => {
            let stage = ground.stages.get(i);
            (
                format!(
                    "conductance of the bed of {}",
                    stage.map_or("a stage", |s| s.name.as_str())
                ),
                Some(Dimension::Conductance),
                stage.map_or(f64::NAN, |s| s.conductance),
            )
        }
        other => (format!("{other:?}, as a factor").to_lowercase(), None, 1.0),
    }
}

fn figure_name(site: &Site, figure: Figure) -> String {
    match figure {
        Figure::Parameter(parameter) => describe(site, parameter).0,
        Figure::Skin(well) => {
            let name = site.ground.wells.get(well).map_or("a well", |w| &w.name);
            format!("skin of {name}")
        }
    }
}

fn rival_name(site: &Site, rival: Rival) -> String {
    match rival {
        Rival::Figure(figure) => figure_name(site, figure),
        Rival::PatchTransmissivity => "how transmissivity varies from place to place".to_owned(),
        Rival::PatchStorativity => "how storativity varies from place to place".to_owned(),
        Rival::Meters => "errors of the meters".to_owned(),
        Rival::Gauges => "offsets and drift of the gauges".to_owned(),
        Rival::Past => "what flowed before the record".to_owned(),
        Rival::Unlike => "responses unlike any ground of the kind described".to_owned(),
    }
}

/// What history could and could not tell, a sentence each.
pub(crate) fn told(site: &Site, account: &Account) -> Vec<String> {
    let mut sentences = Vec::new();
    let mut paired: Vec<(Figure, Figure)> = Vec::new();
    for known in &account.known {
        sentences.extend(about(site, known, &mut paired));
    }
    for (index, well) in site.ground.wells.iter().enumerate() {
        if !has_gauge(site, index) {
            sentences.push(format!(
                "The skin of {} is not seen: only a gauge in its own bore feels it. The site file's {:.1} stands.",
                well.name, well.skin
            ));
        }
    }
    for (patches, what) in account
        .patches
        .iter()
        .zip(["Transmissivity", "Storativity"])
    {
        if patches.count == 0 {
            continue;
        }
        let percent = 100.0 * patches.spread;
        sentences.push(if patches.determined < 1.0 {
            format!(
                "How {} varies from patch to patch is not seen: the spread of {percent:.0} % is as large as what was assumed before; these data say nothing about it.",
                what.to_lowercase()
            )
        } else {
            format!(
                "{what} varies by {percent:.0} % from patch to patch; of {} patches history tells {:.0} apart.",
                patches.count, patches.determined
            )
        });
    }
    if sentences.is_empty() {
        sentences.push("History tells all figures apart.".to_owned());
    }
    sentences
}

/// What is to be said about one figure.
fn about(site: &Site, known: &Known, paired: &mut Vec<(Figure, Figure)>) -> Option<String> {
    let name = capital(&figure_name(site, known.figure));
    if known.sd > UNMOVED * known.prior_sd {
        return Some(format!(
            "{name} is not seen: history says nothing about it, and the site file's value stands."
        ));
    }
    let &(rival, share) = known.mixed.first()?;
    if let Rival::Figure(other) = rival {
        if paired.contains(&(other, known.figure)) {
            return None;
        }
        paired.push((known.figure, other));
    }
    let rival = rival_name(site, rival);
    let percent = 100.0 * share;
    let untold = share >= UNTOLD && known.sd > LITTLE * known.prior_sd;
    Some(if untold {
        format!(
            "{name} cannot be told from {rival} with these gauges and rates: {percent:.0} % of its doubt is that."
        )
    } else {
        format!("{name}: {percent:.0} % of what doubt is left comes from {rival}.")
    })
}

fn capital(text: &str) -> String {
    let mut letters = text.chars();
    letters.next().map_or_else(String::new, |first| {
        first.to_uppercase().chain(letters).collect()
    })
}

/// The figures as JSON.
pub(crate) fn rows_json(rows: &[Row], units: UnitSystem) -> Value {
    rows.iter()
        .map(|row| {
            let number = |si: f64| match row.dimension {
                None => si,
                Some(d) => d
                    .conversion(row.unit(units))
                    .map_or(f64::NAN, |c| c.from_si(si)),
            };
            let triple = |[value, low, high]: [f64; 3]| json!({ "fitted": value, "low_95": low, "high_95": high });
            json!({
                "name": row.name,
                "unit": row.unit(units),
                "described": number(row.described),
                "shown": row.fitted.map(|t| triple(t.map(number))),
                "si_unit": row.si_unit(),
                "described_si": row.described,
                "si": row.fitted.map(triple),
                "seen": row.fitted.is_some(),
            })
        })
        .collect()
}
