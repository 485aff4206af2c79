//! The frame of the expectation: the modal ground at the calibrated parameters, and beside it the same ground with
//! each parameter tilted a little, so that parameter error is a column like any other.

use nalgebra::{DMatrix, DVector};

use super::drive::{Drive, Sampled, Tables};
use crate::ModelError;
use crate::ground::{Ground, Seat};
use crate::reduce::{Factors, Modal, Reduced};
use crate::weak_form::{Parameter, Rock};

/// Step of a parameter's logarithm for its sensitivity.
const TILT: f64 = 2e-3;

/// A modal ground with what is needed to step it.
#[derive(Debug, Clone)]
pub(crate) struct Stepped {
    /// Exact stepping of its modes.
    pub(crate) drive: Drive,
    /// By well: port times functional (modes by gauges), so that a gauge's response is a dot product with the state.
    pub(crate) products: Vec<DMatrix<f64>>,
}

impl Stepped {
    pub(crate) fn of(modal: &Modal) -> Self {
        let products = modal
            .wells
            .column_iter()
            .map(|port| {
                let mut product = modal.gauges.clone();
                for mut column in product.column_iter_mut() {
                    column.component_mul_assign(&port);
                }
                product
            })
            .collect();
        Self {
            drive: Drive::new(modal.lambda.clone()),
            products,
        }
    }

    /// Block means of every pair (gauges by wells) from the means of the unit-port states, by class.
    pub(crate) fn pairs(&self, means: &[DMatrix<f64>], class: &[usize]) -> DMatrix<f64> {
        DMatrix::from_fn(class.len(), self.products.len(), |gauge, well| {
            let product = self.products.get(well);
            let mean = class.get(gauge).and_then(|&c| means.get(c));
            match (product, mean) {
                (Some(p), Some(m)) => p.column(gauge).dot(&m.column(well)),
                _ => 0.0,
            }
        })
    }
}

/// Block means of unit-port states, by class: decayed state plus what was driven in this block.
pub(crate) fn means(
    tables: &Tables,
    state: &DMatrix<f64>,
    driven: &[DMatrix<f64>],
) -> Vec<DMatrix<f64>> {
    tables
        .mean_decay
        .iter()
        .zip(driven)
        .map(|(decay, add)| {
            let mut mean = state.clone();
            for mut column in mean.column_iter_mut() {
                column.component_mul_assign(decay);
            }
            mean + add
        })
        .collect()
}

/// A parameter that may be wrong.
#[derive(Debug, Clone)]
pub(crate) struct Tilted {
    /// Which.
    pub(crate) parameter: Parameter,
    /// The ground with it tilted.
    pub(crate) stepped: Stepped,
    /// By how much its logarithm is tilted.
    pub(crate) step: f64,
}

/// The calibrated ground, ready to step.
#[derive(Debug, Clone)]
pub(crate) struct Frame {
    /// Modes and ports at the calibrated parameters.
    pub(crate) modal: Modal,
    /// The same, stepped.
    pub(crate) base: Stepped,
    /// One ground a free parameter.
    pub(crate) tilted: Vec<Tilted>,
    /// Gauges in wells whose skin acts outside the matrices: gauge, well, pressure per rate and unit of skin \[Pa s/m3\].
    pub(crate) in_wells: Vec<(usize, usize, f64)>,
    /// One, east and north of each gauge, in half-widths of the array from its centre.
    pub(crate) moments: Vec<[f64; 3]>,
    /// Number of gauges.
    pub(crate) gauges: usize,
    /// Number of inputs: wells, then stages and a driven edge.
    pub(crate) wells: usize,
    /// How many of them are wells, whose rates a meter reads.
    pub(crate) meters: usize,
}

impl Frame {
    /// Assembles the frame at `factors`.
    ///
    /// # Errors
    /// Whatever the modal form says of the factors.
    pub(crate) fn new(
        ground: &Ground,
        reduced: &Reduced,
        factors: &Factors,
    ) -> Result<Self, ModelError> {
        let modal = reduced.modal(factors)?;
        let base = Stepped::of(&modal);
        let mut tilted = Vec::new();
        for parameter in free_parameters(reduced) {
            let tilted_factors =
                with_factor(factors, parameter, TILT.exp() * factor(factors, parameter));
            tilted.push(Tilted {
                parameter,
                stepped: Stepped::of(&reduced.modal(&tilted_factors)?),
                step: TILT,
            });
        }
        let mut in_wells = Vec::new();
        for (gauge, seat) in ground.gauges.iter().enumerate() {
            if let Seat::InWell(well) = seat.seat
                && let Some(w) = ground.wells.get(well)
                && w.skin_outside()
            {
                let (parameter, described) = Rock::at(ground, w.at, w.layer).transmissivity;
                let transmissivity = described * factor(factors, parameter);
                in_wells.push((gauge, well, 1.0 / (std::f64::consts::TAU * transmissivity)));
            }
        }
        Ok(Self {
            modal,
            base,
            tilted,
            in_wells,
            moments: moments(ground),
            gauges: ground.gauges.len(),
            wells: ground.inputs(),
            meters: ground.wells.len(),
        })
    }

    /// Gauges without a ground: nothing that flows reaches them.
    pub(crate) fn without_ground(gauges: usize) -> Self {
        let modal = Modal {
            lambda: DVector::zeros(0),
            wells: DMatrix::zeros(0, 0),
            gauges: DMatrix::zeros(0, gauges),
            neighbours: DMatrix::zeros(0, 0),
            places: DMatrix::zeros(0, 0),
        };
        Self {
            base: Stepped::of(&modal),
            modal,
            tilted: Vec::new(),
            in_wells: Vec::new(),
            moments: Vec::new(),
            gauges,
            wells: 0,
            meters: 0,
        }
    }

    /// Well of a gauge whose skin acts at once, with its pressure per rate and unit of skin.
    pub(crate) fn well_of(&self, gauge: usize) -> Option<(usize, f64)> {
        self.in_wells
            .iter()
            .find(|(g, _, _)| *g == gauge)
            .map(|&(_, well, unit)| (well, unit))
    }
}

fn moments(ground: &Ground) -> Vec<[f64; 3]> {
    let (centre, width) = span(ground);
    seats(ground)
        .map(|p| [1.0, (p[0] - centre[0]) / width, (p[1] - centre[1]) / width])
        .collect()
}

fn seats(ground: &Ground) -> impl Iterator<Item = [f64; 2]> + '_ {
    (0..ground.gauges.len()).map(|g| ground.gauge_at(g).map_or([0.0; 2], |(p, _)| p))
}

/// Centre of the gauges and largest distance of one from it \[m\].
pub(crate) fn span(ground: &Ground) -> ([f64; 2], f64) {
    let count = ground.gauges.len().max(1) as f64;
    let mut centre = [0.0; 2];
    for p in seats(ground) {
        centre = [centre[0] + p[0], centre[1] + p[1]];
    }
    let centre = [centre[0] / count, centre[1] / count];
    let width = seats(ground)
        .map(|p| (p[0] - centre[0]).hypot(p[1] - centre[1]))
        .fold(1.0, f64::max);
    (centre, width)
}

/// Parameters of the reduced ground that history may correct, each once, in order.
pub(crate) fn free_parameters(reduced: &Reduced) -> Vec<Parameter> {
    let mut free: Vec<Parameter> = reduced
        .stiffness
        .iter()
        .chain(&reduced.mass)
        .map(|block| block.parameter)
        .filter(|p| !matches!(p, Parameter::Fixed))
        .collect();
    free.sort();
    free.dedup();
    free
}

/// Factor of a parameter; one where none is named.
pub(crate) fn factor(factors: &Factors, parameter: Parameter) -> f64 {
    factors
        .iter()
        .find(|(p, _)| *p == parameter)
        .map_or(1.0, |(_, f)| *f)
}

/// The factors with one of them set.
pub(crate) fn with_factor(factors: &Factors, parameter: Parameter, value: f64) -> Factors {
    let mut next: Factors = factors
        .iter()
        .filter(|(p, _)| *p != parameter)
        .copied()
        .collect();
    next.push((parameter, value));
    next
}

/// A decaying influence of one well's past rate: its unit-port state, seen through that well's products.
pub(crate) fn seen(
    stepped: &Stepped,
    well: usize,
    mean_by_class: &[DVector<f64>],
    class: &[usize],
) -> DVector<f64> {
    DVector::from_fn(class.len(), |gauge, _| {
        let product = stepped.products.get(well);
        let mean = class.get(gauge).and_then(|&c| mean_by_class.get(c));
        match (product, mean) {
            (Some(p), Some(m)) => p.column(gauge).dot(m),
            _ => 0.0,
        }
    })
}

/// Rates of every well held before the sample instants (classes by wells).
pub(crate) fn held(sampled: &Sampled, entering: &[f64]) -> DMatrix<f64> {
    let columns: Vec<Vec<f64>> = entering
        .iter()
        .enumerate()
        .map(|(well, &rate)| sampled.held(well, rate, &|_| true))
        .collect();
    DMatrix::from_fn(
        sampled.geometry.classes.len(),
        entering.len(),
        |class, well| {
            columns
                .get(well)
                .and_then(|c| c.get(class))
                .copied()
                .unwrap_or(0.0)
        },
    )
}
