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

/// Fits the grounds asked for; the readings set aside are those of the fit that stands.
///
/// # Errors
/// Another ground cannot be meshed or fitted.
pub(super) fn compare(
    ground: &Ground,
    reduced: &Reduced,
    history: &[Block],
    (settings, account): (&CommissionSettings, &Account),
    asked: &[Compare],
    progress: &mut dyn FnMut(Stage, f64),
) -> Result<Vec<Tried>, ModelError> {
    let settings = CommissionSettings {
        aside: Some(account.aside()),
        barrier: false,
        ..settings.clone()
    };
    let mut tried = Vec::new();
    let mut show = |share: f64| progress(Stage::Compare, share);
    for what in [Compare::Leaky, Compare::Edge] {
        if !asked.contains(&what) {
            continue;
        }
        if what == Compare::Leaky {
            let (leaky, _, _) = commission_leaky(ground, reduced, history, &settings, &mut show)?;
            tried.push(leaky);
            continue;
        }
        for kind in [EdgeKind::Open, EdgeKind::Closed, EdgeKind::Fixed] {
            // An edge that open water drives is known to be so.
            if [kind, EdgeKind::Driven].contains(&ground.edge.kind) {
                continue;
            }
            let mut other = ground.clone();
            other.edge.kind = kind;
            let reduced = reduce_ground(&other, &mut |_, _| {})?;
            let (_, account) = commission(&other, &reduced, history, &settings, &mut show)?;
            let first = account.tried.into_iter().next();
            tried.extend(first.map(|first| Tried {
                kind: GroundKind::Edge(kind),
                ..first
            }));
        }
    }
    Ok(tried)
}
