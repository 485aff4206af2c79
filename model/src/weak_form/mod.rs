//! The weak statement of pressure diffusion and its test spaces.
//!
//! A scheme is a trial space, a test space and a rule for flux or quadrature; all of them give
//! the symmetric [`System`] `M x' + K x = B u`, `y = C x`.
//!
//! The statement itself stands once, in `statement`. A scheme answers four questions of it, one file each:
//! what storage, conduction and a line joint amount to between the nodes of one triangle or segment, and
//! what the value at a point is. `quadratic` is the working scheme; `linear`, `finite_volume` and
//! `finite_difference` are there to be held against it and where a maximum principle matters.

mod assembly;
mod finite_difference;
mod finite_volume;
mod linear;
mod nodes;
mod quadratic;
mod space;
mod statement;

use faer::sparse::SparseColMat;
use serde::{Deserialize, Serialize};

use crate::ModelError;
use crate::ground::mesh::{Mesh, MeshOptions};
use crate::ground::{Ground, Patches, Point};
use nodes::Nodes;
use space::Space;

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
    /// Conductance of the skin of a well with storage or open to several layers, by order.
    Skin(usize),
    /// Wellbore storage of a well, by order.
    Storage(usize),
    /// Transmissivity of a patch of a layer, by their orders, as a factor on the layer's.
    PatchTransmissivity(usize, usize),
    /// Storativity of a patch of a layer, by their orders, as a factor on the layer's.
    PatchStorativity(usize, usize),
    /// Nothing: the block never changes.
    Fixed,
    /// Transmissivity of a zone, by order.
    ZoneTransmissivity(usize),
    /// Storativity of a zone, by order.
    ZoneStorativity(usize),
    /// Conductance of the bed of a stage, by order (scales its input too).
    Stage(usize),
}

/// What a point of the ground conducts and stores, and by which parameters.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Rock {
    /// Transmissivity \[m3/(Pa s)\].
    pub transmissivity: (Parameter, f64),
    /// Storativity \[m/Pa\].
    pub storativity: (Parameter, f64),
}

impl Rock {
    /// That of the zone which holds the point, else of the layer; zero in a layer that is not there.
    #[must_use]
    pub fn at(ground: &Ground, point: Point, layer: usize) -> Self {
        let zone = ground.zone_at(point, layer);
        if let Some((z, zone)) = zone.and_then(|z| Some((z, ground.zones.get(z)?))) {
            return Self {
                transmissivity: (Parameter::ZoneTransmissivity(z), zone.transmissivity),
                storativity: (Parameter::ZoneStorativity(z), zone.storativity),
            };
        }
        let (t, s) = ground
            .layers
            .get(layer)
            .map_or((0.0, 0.0), |l| (l.transmissivity, l.storativity));
        Self {
            transmissivity: (Parameter::Transmissivity(layer), t),
            storativity: (Parameter::Storativity(layer), s),
        }
    }
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
    /// One port per input of the ground, in order: where a well's rate enters (the wellbore node where there is one, else
    /// the ring or the trace), then what one Pascal of each stage and of a driven edge lets in.
    pub wells: Vec<Functional>,
    /// What scales each of these ports.
    pub drives: Vec<Parameter>,
    /// One functional per gauge of the ground, in order.
    pub gauges: Vec<Functional>,
    /// One functional per neighbour of the ground, in order.
    pub neighbours: Vec<Functional>,
    /// Groups of unknowns that are closed to each other and to the edge: K vanishes on each group's indicator.
    pub closed_components: Vec<Vec<usize>>,
    /// Where each unknown sits and in which layer (a wellbore node sits at its well).
    pub nodes: Vec<(Point, usize)>,
}

/// What the patches of a ground contribute to the matrices of a [`System`].
#[derive(Debug, Clone, Default)]
pub struct PatchShares {
    /// Shares of the storage matrix, one a patch of storativity.
    pub mass: Vec<SparseBlock>,
    /// Shares of the conduction matrix, one a patch of transmissivity.
    pub stiffness: Vec<SparseBlock>,
}

/// How the weak form is made discrete.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Scheme {
    /// Quadratic hat functions on triangles: the working scheme, errors below 2e-4 of a response's peak.
    Quadratic,
    /// Linear hat functions on triangles.
    LinearConsistent,
    /// The same with storage gathered at the vertices.
    LinearLumped,
    /// Voronoi cells with a two-point flux through each face.
    FiniteVolume,
    /// Differences on a rectilinear lattice, whose nodes are wells, not circles: see [`Mesh::lattice`].
    FiniteDifference,
}

impl Scheme {
    fn space(self) -> &'static dyn Space {
        match self {
            Self::Quadratic => &quadratic::Quadratic,
            Self::LinearConsistent => &linear::Linear { lumped: false },
            Self::LinearLumped => &linear::Linear { lumped: true },
            Self::FiniteVolume => &finite_volume::FiniteVolume,
            Self::FiniteDifference => &finite_difference::FiniteDifference,
        }
    }
}

/// A ground made discrete: the system, the mesh it lives on, and where its unknowns are.
#[derive(Debug, Clone)]
pub struct Discrete {
    /// The matrices and functionals.
    pub system: System,
    /// The mesh.
    pub mesh: Mesh,
    scheme: Scheme,
    nodes: Nodes,
}

/// Meshes the ground and puts it into the weak form.
///
/// Wells without storage: the port is the ring's pressure, and the skin acts outside the system. A positive
/// skin adds `skin q / 2 pi T` to the well's pressure at once; a negative one is in the cut-out's radius, so
/// a skin fitted beside a described skin below zero is `min(described, 0)` plus what is fitted. Wells with
/// storage and wells open to several layers have an unknown of their own, joined to the ring of each layer by
/// `2 pi T / skin`, or are one with the rings at skin zero or less.
///
/// # Errors
/// [`ModelError::Mesh`] where the ground cannot be meshed, [`ModelError::Parameter`] where a number of it
/// cannot be used.
pub fn discretise(
    ground: &Ground,
    scheme: Scheme,
    options: &MeshOptions,
) -> Result<Discrete, ModelError> {
    statement::check(ground, scheme.space())?;
    let mesh = match scheme {
        Scheme::FiniteDifference => Mesh::lattice(ground, options)?,
        _ => Mesh::fit(ground, options)?,
    };
    discretise_on(ground, scheme, mesh)
}

/// As [`discretise`], on a mesh already fitted to this ground.
///
/// # Errors
/// As [`discretise`]; [`ModelError::Size`] where the mesh was fitted to another ground.
pub fn discretise_on(ground: &Ground, scheme: Scheme, mesh: Mesh) -> Result<Discrete, ModelError> {
    statement::check(ground, scheme.space())?;
    if scheme == Scheme::FiniteDifference {
        finite_difference::check(&mesh)?;
    }
    let nodes = Nodes::number(ground, &mesh, scheme.space())?;
    let system = statement::assemble(ground, &mesh, scheme.space(), &nodes)?;
    let mut discrete = Discrete {
        system,
        mesh,
        scheme,
        nodes,
    };
    discrete.system.gauges = discrete.gauges(ground)?;
    discrete.system.neighbours = discrete.neighbours(ground)?;
    Ok(discrete)
}

impl Discrete {
    /// The value at a point of a layer as a functional on the unknowns; also a unit source there.
    ///
    /// Within the cut-out of a well of that layer it is the ring's pressure; on a barrier, that of one side.
    ///
    /// # Errors
    /// [`ModelError::Mesh`] where the point lies outside the edge or in no layer.
    pub fn locate(&self, point: Point, layer: usize) -> Result<Functional, ModelError> {
        self.nodes
            .locate(&self.mesh, self.scheme.space(), point, layer)
    }

    /// Shares of storage and conduction that the patches of every layer have in the matrices, at their described values.
    ///
    /// # Errors
    /// [`ModelError::Size`] where the mesh was fitted to another ground.
    pub fn patches(&self, ground: &Ground, patches: &Patches) -> Result<PatchShares, ModelError> {
        let (mass, stiffness) = statement::patches(
            ground,
            &self.mesh,
            self.scheme.space(),
            &self.nodes,
            patches,
        )?;
        Ok(PatchShares { mass, stiffness })
    }

    fn gauges(&self, ground: &Ground) -> Result<Vec<Functional>, ModelError> {
        let of = |(gauge, vertex): (&crate::ground::Gauge, &Option<usize>)| match gauge.seat {
            crate::ground::Seat::InWell(well) => {
                self.system
                    .wells
                    .get(well)
                    .cloned()
                    .ok_or(ModelError::Size {
                        what: "wells, counted by the seat of a gauge",
                        found: self.system.wells.len(),
                        expected: well + 1,
                    })
            }
            crate::ground::Seat::InGround { at, layer } => match *vertex {
                Some(vertex) => Ok(self.nodes.at_vertex(vertex, layer)),
                None => self.locate(at, layer),
            },
        };
        ground
            .gauges
            .iter()
            .zip(&self.mesh.gauges)
            .map(of)
            .collect()
    }

    fn neighbours(&self, ground: &Ground) -> Result<Vec<Functional>, ModelError> {
        let all = ground.neighbours.iter().zip(&self.mesh.neighbours);
        all.map(|(other, vertex)| match *vertex {
            Some(vertex) => Ok(self.nodes.at_vertex(vertex, other.layer)),
            None => self.locate(other.at, other.layer),
        })
        .collect()
    }
}
