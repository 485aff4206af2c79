//! What the reduction costs beside its sparse factorisations alone.
//!
//! ```text
//! cargo run -p borewake-model --example reduction_cost
//! ```
//!
//! 1. Mesh an invented site (three wells, six gauges apart, one neighbour) and put it into the weak form by quadratic elements.
//! 2. Reduce it: closed components, solutions of `(K + s M) X = [B C^T]` at log-spaced shifts s, orthonormalisation in M, projection of
//!    every block, truncation.
//! 3. Factorise `K + s M` as often again, and do nothing else. The ratio of the two times is to stay below three.
//! 4. Certify the reduction against the full system at complex points. This is not part of the ratio.
//! 5. Diagonalise the small pencil.

mod site;

use std::error::Error;

use borewake_model::ground::mesh::MeshOptions;
use borewake_model::reduce::{Basis, ReduceOptions, ShiftedCholesky};
use borewake_model::weak_form::{Scheme, discretise};
use site::Stopwatch;

fn main() -> Result<(), Box<dyn Error>> {
    let ground = site::ground();
    let options = ReduceOptions::default();

    let watch = Stopwatch::start();
    let system = discretise(&ground, Scheme::Quadratic, &MeshOptions::default())?.system;
    println!("mesh and weak form     {:8.3} s", watch.seconds());

    let watch = Stopwatch::start();
    let basis = Basis::build(&system, &options)?;
    let mut reduced = basis.project(&system, &[])?;
    let total = watch.seconds();

    let watch = Stopwatch::start();
    let mut factors = ShiftedCholesky::new(&system)?;
    for &s in basis.shifts() {
        factors.factorise(s)?;
    }
    let alone = watch.seconds();
    println!(
        "factorisations alone   {alone:8.3} s  ({} shifts, {} entries each)",
        basis.shifts().len(),
        factors.fill()
    );
    println!("reduction              {total:8.3} s");
    println!("ratio                  {:8.2}", total / alone);
    println!("nodes                  {:8}", system.size);
    println!(
        "modes                  {:8}  (of {} vectors)",
        basis.modes(),
        basis.width()
    );

    let watch = Stopwatch::start();
    reduced.certificate = basis.certify(&system, &reduced, &options)?;
    let c = &reduced.certificate;
    println!("certificate            {:8.3} s", watch.seconds());
    println!(
        "error at ports         {:8.1e}  of each response's peak, {:.0} s to {:.0} d",
        c.ports,
        c.times.0,
        c.times.1 / site::DAY
    );
    println!("error at random nodes  {:8.1e}", c.random_nodes);
    println!("error of a leak there  {:8.1e}", c.leaks);

    let watch = Stopwatch::start();
    let modal = reduced.modal(&Vec::new())?;
    println!(
        "modal form             {:8.4} s  ({} modes)",
        watch.seconds(),
        modal.modes()
    );
    Ok(())
}
