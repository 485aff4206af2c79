//! Grounds other than the one described, each fitted whole on the same history.

use borewake_model::ModelError;
use borewake_model::commission::{
    Account, CommissionSettings, GroundKind, Tried, commission, commission_leaky,
};
use borewake_model::ground::{EdgeKind, Ground};
use borewake_model::reduce::Reduced;

use super::commissioning::{Stage, reduce_ground};
use crate::record::Block;

/// What a comparison asks for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Compare {
    /// A lowest layer that leaks to a bed at rest.
    Leaky,
    /// The two other kinds of edge, at the same distance.
    Edge,
}

/// Fits the grounds asked for; the readings set aside are those of the fit that stands. What cannot be meshed or fitted
/// is told beside them: it does not touch that fit.
pub(super) fn compare(
    ground: &Ground,
    reduced: &Reduced,
    history: &[Block],
    (settings, account): (&CommissionSettings, &Account),
    asked: &[Compare],
    progress: &mut dyn FnMut(Stage, f64),
) -> (Vec<Tried>, Vec<(GroundKind, String)>) {
    let settings = CommissionSettings {
        aside: Some(account.aside()),
        barrier: false,
        ..settings.clone()
    };
    let (mut tried, mut untried) = (Vec::new(), Vec::new());
    let mut keep = |kind, fit: Result<Tried, ModelError>| match fit {
        Ok(fit) => tried.push(fit),
        Err(why) => untried.push((kind, why.to_string())),
    };
    let mut show = |share: f64| progress(Stage::Compare, share);
    for what in [Compare::Leaky, Compare::Edge] {
        if !asked.contains(&what) {
            continue;
        }
        if what == Compare::Leaky {
            let fit = commission_leaky(ground, reduced, history, &settings, &mut show);
            keep(GroundKind::Leaky, fit.map(|(leaky, _, _)| leaky));
            continue;
        }
        for kind in [EdgeKind::Open, EdgeKind::Closed, EdgeKind::Fixed] {
            // An edge that open water drives is known to be so.
            if [kind, EdgeKind::Driven].contains(&ground.edge.kind) {
                continue;
            }
            let fit = with_edge(ground, kind, history, &settings, &mut show);
            keep(GroundKind::Edge(kind), fit);
        }
    }
    (tried, untried)
}

/// The ground with another kind of edge at the same distance.
fn with_edge(
    ground: &Ground,
    kind: EdgeKind,
    history: &[Block],
    settings: &CommissionSettings,
    show: &mut dyn FnMut(f64),
) -> Result<Tried, ModelError> {
    let mut other = ground.clone();
    other.edge.kind = kind;
    let reduced = reduce_ground(&other, &mut |_, _| {})?;
    let (_, account) = commission(&other, &reduced, history, settings, show)?;
    let first = account.tried.into_iter().next();
    let first = first.ok_or_else(|| ModelError::History("no fit of it stands".to_owned()))?;
    Ok(Tried {
        kind: GroundKind::Edge(kind),
        ..first
    })
}
