//! The model against the line source, at every gauge of an open site with three wells.
//!
//! ```text
//! cargo run -p borewake-model --example line_source
//! ```
//!
//! The ground is one endless layer, so that a closed form is at hand (Theis 1935):
//!
//! ```text
//! S dp/dt - T lap p = q delta(x - x_w)     =>     p(r, t) = q E1(r^2 S / 4 T t) / 4 pi T
//! ```
//!
//! 1. Describe the site: transmissivity T, storativity S, three wells, a gauge in each, six gauges apart, a neighbour.
//! 2. Mesh it and put it into the weak form by quadratic elements: `M x' + K x = B u`, `y = C x`.
//! 3. Reduce: project on closed components and solutions of `(K + s M) X = [B C^T]`, and certify the result.
//! 4. Diagonalise the small pencil: `x_k' = -lambda_k x_k + b_k u`.
//! 5. Step responses follow without any time step: `y(t) = sum_k c_k b_k (1 - exp(-lambda_k t)) / lambda_k`.
//! 6. Compare at log-spaced times: the largest error over the times as a share of the largest response.

mod site;

use std::error::Error;

use borewake_model::closed_form::line_source;
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::reduce::{ReduceOptions, reduce};
use borewake_model::weak_form::{Scheme, discretise};

fn main() -> Result<(), Box<dyn Error>> {
    // 1. and 2.
    let ground = site::ground();
    let system = discretise(&ground, Scheme::Quadratic, &MeshOptions::default())?.system;
    // 3.
    let reduced = reduce(&system, &[], &ReduceOptions::default())?;
    // 4.
    let modal = reduced.modal(&Vec::new())?;
    println!("nodes {}, modes {}", system.size, modal.modes());
    println!(
        "reduced against full system: {:.1e} at ports, {:.1e} at random nodes",
        reduced.certificate.ports, reduced.certificate.random_nodes
    );

    // 5. and 6.
    let times = site::log_times(60.0, 365.25 * site::DAY, 60);
    print!("\nlargest error from 1 min to 1 year, as a share of the response's peak\ngauge");
    for well in &ground.wells {
        print!("{:>12}", well.name);
    }
    println!();
    let mut worst = 0.0_f64;
    for (g, gauge) in ground.gauges.iter().enumerate() {
        print!("{:<5}", gauge.name);
        for w in 0..ground.wells.len() {
            let r = site::distance(&ground, w, g);
            let (mut error, mut peak) = (0.0_f64, 0.0_f64);
            for &t in &times {
                let exact = line_source(r, site::TRANSMISSIVITY, site::STORATIVITY, t);
                let found = modal.step_response(modal.gauges.column(g), modal.wells.column(w), t);
                error = error.max((found - exact).abs());
                peak = peak.max(exact);
            }
            print!("{:>12.1e}", error / peak);
            worst = worst.max(error / peak);
        }
        println!();
    }
    println!("worst {worst:.1e}");
    Ok(())
}
