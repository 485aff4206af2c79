//! What meshing and reduction cost as the mesh grows, and with which power.
//!
//! ```text
//! cargo run --release -p borewake-model --example build_cost
//! ```
//!
//! 1. Mesh an invented site more and more finely, from some 5,000 to 80,000 nodes of quadratic elements.
//! 2. Time the mesh, the weak form, and a reduction with a fixed number of shifts and modes, in seconds of this thread.
//! 3. Tell the largest memory held up to then.
//! 4. Fit the power of the number of nodes: it is to stay at 1.3 or below.

mod site;

use std::error::Error;

use borewake_model::ground::mesh::{Mesh, MeshOptions};
use borewake_model::reduce::{Basis, ReduceOptions};
use borewake_model::weak_form::{Scheme, discretise_on};
use site::Stopwatch;

fn main() -> Result<(), Box<dyn Error>> {
    let ground = site::ground();
    let reduction = ReduceOptions {
        max_shifts: 12,
        max_modes: 120,
        ..ReduceOptions::default()
    };
    println!("points   nodes   mesh s   weak form s   reduction s   all s   peak MB");
    let mut table: Vec<(f64, f64)> = Vec::new();
    for points in [8, 11, 16, 22, 31] {
        let options = MeshOptions {
            points_per_ring: points,
            refine: 1.0,
        };
        let watch = Stopwatch::start();
        let mesh = Mesh::fit(&ground, &options)?;
        let meshing = watch.seconds();
        let watch = Stopwatch::start();
        let system = discretise_on(&ground, Scheme::Quadratic, mesh)?.system;
        let assembly = watch.seconds();
        let watch = Stopwatch::start();
        let basis = Basis::build(&system, &reduction)?;
        let _reduced = basis.project(&system, &[])?;
        let reducing = watch.seconds();
        let all = meshing + assembly + reducing;
        println!(
            "{points:6}   {:5}   {meshing:6.2}   {assembly:11.2}   {reducing:11.2}   {all:5.2}   {:7.0}",
            system.size,
            site::peak_memory()
        );
        table.push(((system.size as f64).ln(), all.ln()));
    }
    println!("cost grows as nodes to the power {:.2}", slope(&table));
    Ok(())
}

/// Slope of the least-squares line.
fn slope(points: &[(f64, f64)]) -> f64 {
    let n = points.len() as f64;
    let mean = |of: fn(&(f64, f64)) -> f64| points.iter().map(of).sum::<f64>() / n;
    let (x, y) = (mean(|p| p.0), mean(|p| p.1));
    let up: f64 = points.iter().map(|p| (p.0 - x) * (p.1 - y)).sum();
    up / points.iter().map(|p| (p.0 - x).powi(2)).sum::<f64>()
}
