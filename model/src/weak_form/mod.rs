//! The weak statement of pressure diffusion and its test spaces.
//!
//! A scheme is a trial space, a test space and a rule for flux or quadrature; all of them give
//! the symmetric [`System`] `M x' + K x = B u`, `y = C x`.

use faer::sparse::SparseColMat;
use serde::{Deserialize, Serialize};

use crate::ground::Point;

/// A parameter on which a block of the matrices depends linearly.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Parameter {
    /// Transmissivity of a layer, by order (scales conduction and the layer's open edge).
    Transmissivity(usize),
    /// Storativity of a layer, by order.
    Storativity(usize),
    /// Leakance below a layer, by order.
    Leakance(usize),
    /// Conductance of a barrier, by order.
    Barrier(usize),
    /// Conductance of the skin of a well with storage, by order.
    Skin(usize),
    /// Wellbore storage of a well, by order.
    Storage(usize),
    /// Nothing: the block never changes.
    Fixed,
}

/// One parameter's share of a symmetric sparse matrix (both triangles stored), at the described value.
#[derive(Debug, Clone)]
pub struct SparseBlock {
    /// What scales it.
    pub parameter: Parameter,
    /// The matrix.
    pub matrix: SparseColMat<usize, f64>,
}

/// A functional on the nodes: value = sum of weight times nodal value. Also a unit source there (reciprocity).
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct Functional(pub Vec<(usize, f64)>);

/// The discrete weak form of one ground under one scheme.
#[derive(Debug, Clone)]
pub struct System {
    /// Number of unknowns.
    pub size: usize,
    /// Shares of the storage matrix M \[m3/Pa\].
    pub mass: Vec<SparseBlock>,
    /// Shares of the conduction matrix K \[m3/(Pa s)\].
    pub stiffness: Vec<SparseBlock>,
    /// One port per well of the ground, in order: where its rate enters (the wellbore node with storage, else the ring).
    pub wells: Vec<Functional>,
    /// One functional per gauge of the ground, in order.
    pub gauges: Vec<Functional>,
    /// One functional per neighbour of the ground, in order.
    pub neighbours: Vec<Functional>,
    /// Groups of unknowns that are closed to each other and to the edge: K vanishes on each group's indicator.
    pub closed_components: Vec<Vec<usize>>,
    /// Where each unknown sits and in which layer (a wellbore node sits at its well).
    pub nodes: Vec<(Point, usize)>,
}
