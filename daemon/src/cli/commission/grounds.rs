//! Grounds held against each other, as a table and in words.

use borewake_model::commission::{GroundKind, Tried};
use borewake_model::ground::EdgeKind;
use borewake_model::units::{DAY, Dimension, WATER_WEIGHT, significant};
use borewake_model::weak_form::Parameter;
use serde_json::{Value, json};

use super::Found;
use super::figures::parameter_row;
use crate::cli::table::{Align, Table};
use crate::report::calibration::Sheet;

/// Lead in log evidence from which one ground is preferred (e^5 to 1; Jeffreys 1961 calls it decisive).
const PREFERRED: f64 = 5.0;

fn name(found: &Found<'_>, kind: GroundKind) -> String {
    match kind {
        GroundKind::AsDescribed => "as described".to_owned(),
        GroundKind::Barrier => "with a barrier nobody declared".to_owned(),
        GroundKind::Leaky => {
            let layer = found.site.ground.layers.last();
            format!("{} leaks", layer.map_or("a layer", |l| l.name.as_str()))
        }
        GroundKind::Edge(kind) => format!("edge {}", edge(kind)),
    }
}

fn edge(kind: EdgeKind) -> &'static str {
    match kind {
        EdgeKind::Open => "open",
        EdgeKind::Closed => "closed",
        EdgeKind::Fixed => "fixed",
        EdgeKind::Driven => "driven by open water",
    }
}

/// Parameters that get a column: those of layers.
fn columns(found: &Found<'_>) -> Vec<Parameter> {
    let first = found.account.tried.first();
    let factors = first.map_or(&[][..], |t| t.factors.as_slice());
    factors
        .iter()
        .map(|(p, _)| *p)
        .filter(|p| matches!(p, Parameter::Transmissivity(_) | Parameter::Storativity(_)))
        .collect()
}

fn cells(found: &Found<'_>) -> (Vec<String>, Vec<Vec<String>>) {
    let site = found.site;
    let columns = columns(found);
    let mut heads = vec!["ground".to_owned(), "log evidence".to_owned()];
    for parameter in &columns {
        let row = parameter_row(site, *parameter, 1.0, 0.0);
        heads.push(
            format!("{} {}", row.name, row.unit(site.units))
                .trim()
                .to_owned(),
        );
    }
    heads.push("leakance".to_owned());
    let described = described(found);
    let rows = found.account.tried.iter().map(|tried| {
        let mut row = vec![
            name(found, tried.kind),
            format!("{:+.1}", tried.log_evidence - described),
        ];
        for parameter in &columns {
            let factor = tried.factors.iter().find(|(p, _)| p == parameter);
            row.push(factor.map_or_else(String::new, |&(_, factor)| {
                let fitted = parameter_row(site, *parameter, factor, 0.0);
                let value = fitted.fitted.map_or(f64::NAN, |f| f[0]);
                fitted.shown(site.units, value)
            }));
        }
        row.push(
            tried
                .leakance
                .map_or_else(String::new, |l| leakance(found, l)),
        );
        row
    });
    (heads, rows.collect())
}

/// A leakance with the resistance of the bed, as hydrogeologists tell it.
fn leakance(found: &Found<'_>, value: f64) -> String {
    let resistance = 1.0 / (value * WATER_WEIGHT * DAY);
    format!(
        "{} (c {} d)",
        found.site.units.show(Dimension::Leakance, value),
        significant(resistance, 3)
    )
}

fn described(found: &Found<'_>) -> f64 {
    let first = found.account.tried.first();
    first.map_or(0.0, |t| t.log_evidence)
}

/// The table for people.
pub(super) fn table(found: &Found<'_>) -> Table {
    let (heads, rows) = cells(found);
    let aligned: Vec<(&str, Align)> = heads
        .iter()
        .enumerate()
        .map(|(column, head)| {
            let align = if column == 0 {
                Align::Left
            } else {
                Align::Right
            };
            (head.as_str(), align)
        })
        .collect();
    let mut table = Table::new(&aligned);
    for row in rows {
        table.row(row);
    }
    table
}

/// The table for the page.
pub(super) fn sheet(found: &Found<'_>) -> Sheet {
    let (heads, rows) = cells(found);
    Sheet {
        numbers: (1..heads.len()).collect(),
        heads,
        rows,
    }
}

fn best<'a>(found: &Found<'a>) -> Option<&'a Tried> {
    let tried = found.account.tried.iter();
    tried.max_by(|a, b| a.log_evidence.total_cmp(&b.log_evidence))
}

/// What follows from it.
pub(super) fn choice(found: &Found<'_>) -> String {
    let Some(best) = best(found) else {
        return String::new();
    };
    let lead = best.log_evidence - described(found);
    if best.kind == GroundKind::AsDescribed || lead < PREFERRED {
        return "No other ground explains this history clearly better than the one described (a lead of 5 would).".to_owned();
    }
    let mend = match best.kind {
        GroundKind::AsDescribed => "",
        GroundKind::Barrier => {
            "The watch reports the barrier if what follows bears it out; if you know of it, declare it with [[barrier]] and commission again."
        }
        GroundKind::Leaky => {
            "The ground file still holds the ground as described. To take the leak up, declare the bed that feeds or drains as a further [[layer]] of much storage, join the two by leakance_up, and commission again."
        }
        GroundKind::Edge(_) => {
            "The ground file still holds the ground as described. To take it up, change kind under [edge] and commission again."
        }
    };
    format!(
        "History prefers \"{}\", by {lead:.0} in log evidence. {mend}",
        name(found, best.kind)
    )
}

/// What could not be compared, and why.
pub(super) fn untried(found: &Found<'_>) -> Vec<String> {
    let untried = found.account.untried.iter();
    let told = untried.map(|(kind, why)| {
        format!(
            "The ground \"{}\" could not be fitted for comparison: {why}.",
            name(found, *kind)
        )
    });
    told.collect()
}

/// The table as JSON.
pub(super) fn json(found: &Found<'_>) -> Value {
    let described = described(found);
    let rows = found.account.tried.iter().map(|tried| {
        json!({
            "ground": name(found, tried.kind),
            "kind": tried.kind,
            "log_evidence": tried.log_evidence,
            "against_described": tried.log_evidence - described,
            "factors": tried.factors,
            "leakance_si": tried.leakance,
        })
    });
    json!({ "tried": rows.collect::<Vec<_>>(), "choice": choice(found) })
}
