//! What one block of the model's step costs beside a dense matrix-vector product of the same count of modes.
//!
//! ```text
//! cargo run -p borewake-model --example step_cost
//! ```
//!
//! 1. Take as many modes as an invented site with three wells and nine gauges has.
//! 2. Step half an hour in which the rates change every ten minutes and the gauges are wanted three times.
//! 3. Step the same with rates that change at odd instants, so that no step length is kept ready and every decay must be
//!    computed anew.
//! 4. Multiply a dense square matrix with a vector of as many entries: what a filter with a full transition matrix would do.

mod site;

use std::error::Error;
use std::hint::black_box;

use borewake_model::block::{RateKnown, RatePath};
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::reduce::{Basis, Propagator, ReduceOptions};
use borewake_model::weak_form::{Scheme, discretise};
use nalgebra::{DMatrix, DVector};
use site::Stopwatch;

const BLOCK: f64 = 1800.0;
const REPEATS: u32 = 20_000;

fn main() -> Result<(), Box<dyn Error>> {
    let system = discretise(&site::ground(), Scheme::Quadratic, &MeshOptions::default())?.system;
    let reduced = Basis::build(&system, &ReduceOptions::default())?.project(&system, &[])?;
    let modal = reduced.modal(&Vec::new())?;
    let modes = modal.modes();
    let mut propagator = Propagator::new(&modal);
    let mut state = DVector::zeros(modes);
    let mut shown = DMatrix::zeros(modal.gauges.ncols(), 3);
    let path = |cuts: [f64; 2], rate: f64| RatePath {
        pieces: vec![(cuts[0], rate), (cuts[1], 1.1 * rate), (BLOCK, 0.9 * rate)],
        known: RateKnown::Read,
    };
    let instants = [600.0, 1200.0, 1800.0];

    let even: Vec<RatePath> = (1..4)
        .map(|w| path([600.0, 1200.0], 1e-3 * f64::from(w)))
        .collect();
    let watch = Stopwatch::start();
    for _ in 0..REPEATS {
        propagator.advance(&mut state, black_box(&even), BLOCK, &instants, &mut shown)?;
    }
    let kept = watch.seconds() / f64::from(REPEATS);

    let mut odd = even.clone();
    let watch = Stopwatch::start();
    for k in 0..REPEATS {
        let shift = f64::from(k) * 0.01;
        for (path, late) in odd.iter_mut().zip([0.0, 11.0, 23.0]) {
            for (piece, at) in path.pieces.iter_mut().zip([400.0, 1000.0]) {
                piece.0 = at + late + shift;
            }
        }
        propagator.advance(&mut state, black_box(&odd), BLOCK, &instants, &mut shown)?;
    }
    let anew = watch.seconds() / f64::from(REPEATS);

    let matrix = DMatrix::from_fn(modes, modes, |i, j| 1.0 / (1.0 + i as f64 + j as f64));
    let mut product = DVector::zeros(modes);
    let watch = Stopwatch::start();
    for _ in 0..REPEATS {
        product.gemv(1.0, black_box(&matrix), black_box(&state), 0.0);
        black_box(&mut product);
    }
    let dense = watch.seconds() / f64::from(REPEATS);

    let micro = 1e6;
    println!("modes                                {modes:8}");
    println!(
        "dense product                        {:8.2} us",
        dense * micro
    );
    println!(
        "block, step lengths kept ready       {:8.2} us   ratio {:.2}",
        kept * micro,
        kept / dense
    );
    println!(
        "block, nine step lengths, all new    {:8.2} us   ratio {:.2}",
        anew * micro,
        anew / dense
    );
    Ok(())
}
