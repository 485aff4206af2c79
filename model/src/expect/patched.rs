//! What a change of the ground in one patch does to every pair of well and gauge.
//!
//! To first order in the logarithm of a patch's factor the step response of a pair changes by a sum over pairs of modes,
//! `sum_ab c_a E_ab b_b D(lambda_a, lambda_b, t)`, with E the change of the pencil in modal coordinates and D the divided
//! difference of the modes' own responses. Any such response is close to a sum of few exponentials, so each is kept by
//! its shares of lags that all patches have in common: stepping them costs no more than stepping the lags.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over modes, times and lags laid out here"
)]

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use super::drive::gain;
use crate::ModelError;
use crate::reduce::{Factors, Modal, Reduced};
use crate::weak_form::Parameter;

/// Time constants of the lags \[s\]: first, last and how many.
const FIRST: f64 = 240.0;
const LAST: f64 = 4e8;
const COUNT: usize = 24;
/// Times at which responses are compared \[s\]: first, last and how many.
const FROM: f64 = 60.0;
const UNTIL: f64 = 1e9;
const SAMPLES: usize = 72;
/// Weight of keeping the shares small.
const RIDGE: f64 = 1e-5;

/// Changes of the pairs' responses with the patches.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct Patched {
    /// Which patch each is.
    pub parameters: Vec<Parameter>,
    /// Shares of the lags of every pair, by patch (gauge by well, row-major by gauge; by lags) \[Pa s/m3\].
    pub shares: Vec<DMatrix<f64>>,
}

/// Time constants of the lags \[s\].
pub(crate) fn lags() -> DVector<f64> {
    spaced(FIRST, LAST, COUNT)
}

fn spaced(first: f64, last: f64, count: usize) -> DVector<f64> {
    DVector::from_fn(count, |k, _| {
        first * (last / first).powf(k as f64 / (count - 1) as f64)
    })
}

impl Patched {
    /// Works out the changes at `factors`, whose modal form is `modal`.
    ///
    /// # Errors
    /// As [`Reduced::modal`].
    pub(crate) fn of(
        reduced: &Reduced,
        modal: &Modal,
        factors: &Factors,
    ) -> Result<Self, ModelError> {
        let tilts = reduced.patch_tilts(factors)?;
        let (gauges, wells) = (modal.gauges.ncols(), modal.wells.ncols());
        let parameters: Vec<Parameter> = reduced.patches.iter().map(|b| b.parameter).collect();
        let times = spaced(FROM, UNTIL, SAMPLES);
        let mut responses = vec![DMatrix::zeros(SAMPLES, gauges * wells); tilts.len()];
        for (at, &time) in times.iter().enumerate() {
            let (stored, conducted) = divided(&modal.lambda, time);
            for ((tilt, parameter), out) in tilts.iter().zip(&parameters).zip(&mut responses) {
                let by = match parameter {
                    Parameter::PatchStorativity(..) => &stored,
                    _ => &conducted,
                };
                let seen = modal
                    .gauges
                    .tr_mul(&(tilt.component_mul(by) * &modal.wells));
                for gauge in 0..gauges {
                    for well in 0..wells {
                        out[(at, gauge * wells + well)] = -seen[(gauge, well)];
                    }
                }
            }
        }
        // Shares by least squares over the times.
        let lags = lags();
        let design = DMatrix::from_fn(SAMPLES, COUNT, |t, l| -(-times[t] / lags[l]).exp_m1());
        let mut gram = design.tr_mul(&design);
        for index in 0..COUNT {
            gram[(index, index)] += RIDGE;
        }
        let solve = gram
            .cholesky()
            .ok_or(ModelError::NotPositive {
                what: "the matrix of the lags",
            })?
            .solve(&design.transpose());
        let shares = responses
            .iter()
            .map(|response| (&solve * response).transpose())
            .collect();
        Ok(Self { parameters, shares })
    }

    /// Number of patches.
    pub(crate) fn len(&self) -> usize {
        self.parameters.len()
    }
}

/// Divided differences of two modes' responses to a step at `t`: to a change of storage and of conduction.
fn divided(lambda: &DVector<f64>, t: f64) -> (DMatrix<f64>, DMatrix<f64>) {
    let modes = lambda.len();
    let decay = lambda.map(|l| (-l * t).exp());
    let gains = lambda.map(|l| gain(l, t));
    let mut stored = DMatrix::zeros(modes, modes);
    let mut conducted = DMatrix::zeros(modes, modes);
    for i in 0..modes {
        for j in 0..=i {
            let (low, high) = (lambda[j].min(lambda[i]), lambda[j].max(lambda[i]));
            let apart = high - low;
            let (s, c) = if apart > 1e-3 * high {
                (
                    (decay[j] - decay[i]).abs() / apart,
                    (gains[j] - gains[i]).abs() / apart,
                )
            } else {
                let middle = 0.5 * (low + high);
                let keep = (-middle * t).exp();
                let slope = if middle * t > 1e-4 {
                    (gain(middle, t) - t * keep) / middle
                } else {
                    0.5 * t * t
                };
                (t * keep, slope)
            };
            stored[(i, j)] = s;
            stored[(j, i)] = s;
            conducted[(i, j)] = c;
            conducted[(j, i)] = c;
        }
    }
    (stored, conducted)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::commission::Places;
    use crate::ground::mesh::MeshOptions;
    use crate::ground::{Edge, EdgeKind, Gauge, Ground, Layer, Patches, Seat, Well};
    use crate::reduce::{ReduceOptions, reduce_patched};
    use crate::weak_form::{Scheme, discretise};

    fn ground() -> Ground {
        let well = |name: &str, at| Well {
            name: name.into(),
            at,
            layer: 0,
            also: Vec::new(),
            radius: 0.1,
            skin: 0.0,
            storage: 0.0,
            trace: Vec::new(),
        };
        let gauge = |name: &str, seat| Gauge {
            name: name.into(),
            seat,
            noise: 100.0,
            drift: 0.0,
        };
        Ground {
            layers: vec![Layer {
                name: "sand".into(),
                transmissivity: 2e-9,
                storativity: 4e-9,
                leakance_below: None,
                anisotropy: None,
            }],
            zones: Vec::new(),
            edge: Edge {
                kind: EdgeKind::Open,
                distance: 20_000.0,
            },
            barriers: Vec::new(),
            stages: Vec::new(),
            wells: vec![well("A", [0.0, 0.0]), well("B", [600.0, 200.0])],
            gauges: vec![
                gauge("a", Seat::InWell(0)),
                gauge(
                    "o",
                    Seat::InGround {
                        at: [-300.0, 500.0],
                        layer: 0,
                    },
                ),
            ],
            neighbours: Vec::new(),
        }
    }

    #[test]
    fn patches_share_out_the_ground_and_their_tilts_are_those_of_the_modes() {
        let ground = ground();
        let discrete = discretise(&ground, Scheme::Quadratic, &MeshOptions::default()).unwrap();
        let array = Places::of(&ground);
        let patches = Patches {
            centre: array.centre,
            half_width: array.half_width,
        };
        let shares = discrete.patches(&ground, &patches).unwrap();
        let options = ReduceOptions::default();
        let reduced = reduce_patched(&discrete.system, &shares, &[], &options).unwrap();

        // All patches together are their layer, but for the edge in conduction.
        let sum = |parameter: Parameter| {
            let parts = reduced.patches.iter().filter(|b| {
                matches!(b.parameter, Parameter::PatchStorativity(..))
                    == matches!(parameter, Parameter::Storativity(_))
            });
            parts.fold(DMatrix::zeros(reduced.modes(), reduced.modes()), |s, b| {
                s + &b.matrix
            })
        };
        let whole = &reduced.mass[0].matrix;
        assert!((sum(Parameter::Storativity(0)) - whole).norm() < 1e-9 * whole.norm());

        // One patch held against the modes with its factor moved.
        let factors = vec![
            (Parameter::Transmissivity(0), 1.1),
            (Parameter::PatchTransmissivity(0, 12), 1.3),
        ];
        let modal = reduced.modal(&factors).unwrap();
        let patched = Patched::of(&reduced, &modal, &factors).unwrap();
        let lags = lags();
        for index in [
            Parameter::PatchTransmissivity(0, 12),
            Parameter::PatchTransmissivity(0, 28),
            Parameter::PatchStorativity(0, 4),
        ] {
            let at = patched.parameters.iter().position(|p| *p == index).unwrap();
            let step = 1e-3;
            let moved = |by: f64| {
                let mut factors = factors.clone();
                factors.push((index, f64::exp(by)));
                reduced.modal(&factors).unwrap()
            };
            let (up, down) = (moved(step), moved(-step));
            let response = |m: &Modal, gauge: usize, well: usize, t: f64| -> f64 {
                (0..m.lambda.len())
                    .map(|k| m.gauges[(k, gauge)] * m.wells[(k, well)] * gain(m.lambda[k], t))
                    .sum()
            };
            for gauge in 0..2 {
                for well in 0..2 {
                    let times = spaced(600.0, 3e7, 30);
                    let direct: Vec<f64> = times
                        .iter()
                        .map(|&t| {
                            (response(&up, gauge, well, t) - response(&down, gauge, well, t))
                                / (2.0 * step)
                        })
                        .collect();
                    let peak = direct.iter().fold(0.0_f64, |m, v| m.max(v.abs()));
                    for (t, direct) in times.iter().zip(&direct) {
                        let kept: f64 = patched.shares[at]
                            .row(gauge * 2 + well)
                            .iter()
                            .zip(lags.iter())
                            .map(|(share, lag)| -share * (-t / lag).exp_m1())
                            .sum();
                        assert!(
                            (kept - direct).abs() < 0.02 * peak,
                            "{index:?} gauge {gauge} well {well} at {t:.0} s: {kept:e} for {direct:e}, peak {peak:e}"
                        );
                    }
                }
            }
        }

        // Taken into the layer for good, the ground is the same.
        let settled = reduced.settled(&factors[1..].to_vec()).unwrap();
        let again = settled.modal(&factors[..1].to_vec()).unwrap();
        assert!((again.lambda - &modal.lambda).norm() < 1e-12 * modal.lambda.norm());
    }
}
