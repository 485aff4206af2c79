//! How exact the numbers behind a fitted ground are, in words.

use borewake_model::commission::Commissioned;
use borewake_model::reduce::Certificate;

/// How exact the numbers are, for people: errors are shares of a response's peak.
pub(super) fn numbers(commissioned: &Commissioned) -> String {
    let described = &commissioned.reduced.certificate;
    let line = |label: &str, c: &Certificate| {
        format!(
            "{label:<13} worst step response {:.1e} at wells and gauges, {:.1e} at random nodes, {:.1e} of a leak there\n",
            c.ports, c.random_nodes, c.leaks
        )
    };
    let mut text = format!(
        "model         {} unknowns, {} modes; errors as shares of a response's peak\n{}",
        described.full_size,
        described.modes,
        line("as described", described)
    );
    if let Some(worst) = described.box_corners {
        text += &format!(
            "over the prior {worst:.1e} at the corners of what was thought possible of the ground\n"
        );
    }
    if let Some(numerics) = &commissioned.numerics {
        text += &format!(
            "{}mesh          {:.1e} between two sizes, {:.1e} between two schemes\nnoise of it   {:.1e} of every response is left to the numbers: no alarm is tighter\n",
            line("as fitted", &numerics.fitted),
            numerics.spread.sizes,
            numerics.spread.schemes,
            numerics.pair(),
        );
    }
    text
}
