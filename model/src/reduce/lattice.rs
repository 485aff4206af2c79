//! A small system for tests: a five-point finite-volume lattice, geometric towards its edge, with two wells (one of
//! them with storage behind a skin), a gauge in the ground, a neighbour, and a barrier.

use faer::sparse::{SparseColMat, Triplet};

use crate::weak_form::{Functional, Parameter, SparseBlock, System};

/// How the lattice ends.
#[derive(Clone, Copy, PartialEq)]
pub(super) enum Ends {
    Open,
    Closed,
    /// Closed, and cut in two by a sealed barrier.
    Compartments,
}

pub(super) const TRANSMISSIVITY: f64 = 2e-10;
pub(super) const STORATIVITY: f64 = 1e-9;

pub(super) struct Lattice {
    pub(super) system: System,
}

impl Lattice {
    /// `2 half + 1` nodes a side; spacing 20 m in the middle, 1.25 times more from node to node beyond 5 nodes from it.
    pub(super) fn new(half: usize, ends: Ends) -> Self {
        let side = 2 * half + 1;
        let mut at = vec![0.0; side];
        let mut step = 20.0;
        for k in 1..=half {
            if k > 5 {
                step *= 1.25;
            }
            at[half + k] = at[half + k - 1] + step;
            at[half - k] = -at[half + k];
        }
        let width: Vec<f64> = (0..side)
            .map(|k| {
                let left = if k > 0 { at[k] - at[k - 1] } else { 0.0 };
                let right = if k + 1 < side { at[k + 1] - at[k] } else { 0.0 };
                0.5 * (left + right)
            })
            .collect();
        let node = |i: usize, j: usize| j * side + i;
        let bore = side * side;
        let size = bore + 1;
        let (mut conduction, mut barrier, mut storage, mut edge) = (vec![], vec![], vec![], vec![]);
        let pair = |list: &mut Vec<Triplet<usize, usize, f64>>, a: usize, b: usize, c: f64| {
            for (i, j, v) in [(a, a, c), (b, b, c), (a, b, -c), (b, a, -c)] {
                list.push(Triplet::new(i, j, v));
            }
        };
        for j in 0..side {
            for i in 0..side {
                let area = width[i] * width[j];
                storage.push(Triplet::new(node(i, j), node(i, j), STORATIVITY * area));
                if i + 1 < side {
                    let c = TRANSMISSIVITY * width[j] / (at[i + 1] - at[i]);
                    // The barrier runs north between the two columns east of the middle.
                    if i == half + 3 {
                        if ends != Ends::Compartments {
                            pair(&mut barrier, node(i, j), node(i + 1, j), 0.05 * c);
                        }
                    } else {
                        pair(&mut conduction, node(i, j), node(i + 1, j), c);
                    }
                }
                if j + 1 < side {
                    let c = TRANSMISSIVITY * width[i] / (at[j + 1] - at[j]);
                    pair(&mut conduction, node(i, j), node(i, j + 1), c);
                }
                if ends == Ends::Open && (i == 0 || j == 0 || i + 1 == side || j + 1 == side) {
                    let length = width[i].max(width[j]);
                    edge.push(Triplet::new(
                        node(i, j),
                        node(i, j),
                        TRANSMISSIVITY * length / at[side - 1],
                    ));
                }
            }
        }
        let (first, second) = (node(half - 2, half), node(half + 1, half + 2));
        let mut skin = vec![];
        pair(&mut skin, second, bore, TRANSMISSIVITY * 2.0);
        let bore_storage = vec![Triplet::new(bore, bore, 1e-7)];
        conduction.extend(edge);
        let block = |parameter, list: Vec<Triplet<usize, usize, f64>>| SparseBlock {
            parameter,
            matrix: SparseColMat::try_new_from_triplets(size, size, &list).unwrap(),
        };
        let one = |node: usize| Functional(vec![(node, 1.0)]);
        let mut nodes: Vec<_> = (0..bore)
            .map(|k| ([at[k % side], at[k / side]], 0))
            .collect();
        nodes.push(nodes[second]);
        let (west, east): (Vec<usize>, Vec<usize>) = (0..bore).partition(|k| k % side <= half + 3);
        let closed_components = match ends {
            Ends::Open => vec![],
            Ends::Closed => vec![(0..size).collect()],
            Ends::Compartments => {
                let mut west = west;
                west.push(bore);
                vec![west, east]
            }
        };
        Self {
            system: System {
                drives: Vec::new(),
                size,
                mass: vec![
                    block(Parameter::Storativity(0), storage),
                    block(Parameter::Storage(1), bore_storage),
                ],
                stiffness: vec![
                    block(Parameter::Transmissivity(0), conduction),
                    block(Parameter::Barrier(0), barrier),
                    block(Parameter::Skin(1), skin),
                ],
                wells: vec![one(first), one(bore)],
                gauges: vec![
                    one(first),
                    one(bore),
                    Functional(vec![
                        (node(half - 4, half + 3), 0.25),
                        (node(half - 4, half + 4), 0.75),
                    ]),
                    one(node(half + 5, half - 3)),
                ],
                neighbours: vec![one(node(half - 6, half - 6))],
                closed_components,
                nodes,
            },
        }
    }

    /// Total storage \[m3/Pa\] of a set of nodes.
    pub(super) fn storage(&self, nodes: &[usize]) -> f64 {
        let mut sum = 0.0;
        for block in &self.system.mass {
            for t in block.matrix.as_ref().triplet_iter() {
                if nodes.contains(&t.row) {
                    sum += t.val;
                }
            }
        }
        sum
    }
}
