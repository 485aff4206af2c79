//! The error of the reduction against the number of modes, and how much faster it steps than the full model.
//!
//! ```text
//! cargo run --release -p borewake-model --example modes_table
//! ```
//!
//! 1. Mesh an invented site (three wells with a gauge each, six gauges apart) and put it into the weak form by quadratic elements.
//! 2. Reduce it to at most 60, 100, 150 and 220 modes, and certify each against the full system at complex points: step
//!    responses from 1 min to 1 year, as a share of each response's peak within that year. "At ports" is between all wells and
//!    gauges; "at random nodes" is a rate at a well seen at 200 nodes drawn near them; "leaks" is a rate at such a node
//!    as any gauge shows it.
//! 3. Step the largest through a year of 10 min steps; step the full model implicitly with one factorisation for a part of
//!    that year, and scale up. The ratio is to be a thousand or more.

mod site;

use std::error::Error;

use borewake_model::block::{RateKnown, RatePath};
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::reduce::{Basis, Propagator, ReduceOptions};
use borewake_model::weak_form::{Scheme, discretise};
use faer::linalg::solvers::Solve;
use faer::sparse::{SparseColMat, Triplet};
use faer::{Mat, Side};
use nalgebra::{DMatrix, DVector};
use site::Stopwatch;

/// Length of a step \[s\].
const STEP: f64 = 600.0;
/// Steps in a year.
const STEPS: u32 = 52_596;
/// Steps of the full model that are timed.
const TIMED: u32 = 40;

fn main() -> Result<(), Box<dyn Error>> {
    let mut ground = site::ground();
    // A neighbour's port would take its share of the modes.
    ground.neighbours.clear();
    let system = discretise(&ground, Scheme::Quadratic, &MeshOptions::default())?.system;
    println!(
        "{} nodes; worst step response from 1 min to 1 year, as a share of its peak\n",
        system.size
    );
    println!("modes   shifts   at ports   at random nodes     leaks   build s");
    let mut largest = None;
    for most in [60, 100, 150, 220] {
        let options = ReduceOptions {
            max_modes: most,
            max_shifts: if most > 170 { 40 } else { 28 },
            tolerance: if most > 170 { 1e-6 } else { 1e-4 },
            checked_times: 16,
            checked_nodes: 200,
            ..ReduceOptions::default()
        };
        let watch = Stopwatch::start();
        let basis = Basis::build(&system, &options)?;
        let mut reduced = basis.project(&system, &[])?;
        let build = watch.seconds();
        reduced.certificate = basis.certify(&system, &reduced, &options)?;
        let c = &reduced.certificate;
        println!(
            "{:5}   {:6}   {:8.1e}   {:15.1e}   {:7.1e}   {build:7.1}",
            c.modes, c.shifts, c.ports, c.random_nodes, c.leaks
        );
        largest = Some(reduced);
    }

    let Some(reduced) = largest else {
        return Ok(());
    };
    let modal = reduced.modal(&Vec::new())?;
    let mut propagator = Propagator::new(&modal);
    let mut state = DVector::zeros(modal.modes());
    let mut shown = DMatrix::zeros(modal.gauges.ncols(), 1);
    let watch = Stopwatch::start();
    for k in 0..STEPS {
        let rates: Vec<RatePath> = (0..modal.wells.ncols())
            .map(|_| RatePath {
                pieces: vec![(STEP, rate(k))],
                known: RateKnown::Read,
            })
            .collect();
        propagator.advance(&mut state, &rates, STEP, &[STEP], &mut shown)?;
    }
    let reduced_year = watch.seconds();

    let mut entries = Vec::new();
    for (blocks, share) in [(&system.stiffness, 1.0), (&system.mass, STEP.recip())] {
        for t in blocks.iter().flat_map(|b| b.matrix.triplet_iter()) {
            entries.push(Triplet::new(t.row, t.col, share * *t.val));
        }
    }
    let matrix = SparseColMat::try_new_from_triplets(system.size, system.size, &entries)?;
    let factor = matrix.sp_cholesky(Side::Lower)?;
    let mut full = Mat::<f64>::zeros(system.size, 1);
    let watch = Stopwatch::start();
    for k in 0..TIMED {
        // (M/dt + K) x = M/dt x + B u.
        let mut right = Mat::<f64>::zeros(system.size, 1);
        for t in system.mass.iter().flat_map(|b| b.matrix.triplet_iter()) {
            right[(t.row, 0)] += *t.val / STEP * full[(t.col, 0)];
        }
        for &(i, w) in system.wells.iter().flat_map(|p| &p.0) {
            right[(i, 0)] += rate(k) * w;
        }
        factor.solve_in_place(&mut right);
        full = right;
    }
    let full_year = watch.seconds() * f64::from(STEPS) / f64::from(TIMED);
    println!(
        "\na year of 10 min steps: {reduced_year:.3} s with {} modes, {full_year:.0} s in full: {:.0} times faster",
        modal.modes(),
        full_year / reduced_year
    );
    println!(
        "(the gauges end at {:.4e} Pa in sum, the full model's nodes at {:.4e})",
        shown.sum(),
        full.col(0).iter().sum::<f64>()
    );
    Ok(())
}

/// Rate of every well in a step \[m3/s\].
fn rate(step: u32) -> f64 {
    1e-3 * f64::from(1 + step % 7)
}
