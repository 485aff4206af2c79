//! Schemes that must be one, and the equivalent radius of a well that is a node.

use std::collections::BTreeMap;
use std::f64::consts::PI;

use borewake_model::ground::mesh::{Mesh, MeshOptions};
use borewake_model::weak_form::{Scheme, SparseBlock, System, discretise, discretise_on};

use crate::support::{T, three_wells, transfer};
use crate::uniform::{one_node, squares, triangles};

fn entries(block: &SparseBlock) -> BTreeMap<(usize, usize), f64> {
    let all = block.matrix.triplet_iter();
    all.map(|t| ((t.row, t.col), *t.val)).collect()
}

/// Largest difference of entries as a share of the largest entry.
fn difference(one: &SparseBlock, other: &SparseBlock) -> f64 {
    let (one, other) = (entries(one), entries(other));
    let largest = one.values().fold(0.0, |m: f64, v| m.max(v.abs()));
    let keys = one.keys().chain(other.keys());
    let value = |map: &BTreeMap<(usize, usize), f64>, at| map.get(at).copied().unwrap_or(0.0);
    keys.map(|at| (value(&one, at) - value(&other, at)).abs() / largest)
        .fold(0.0, f64::max)
}

fn system(scheme: Scheme, mesh: Mesh) -> System {
    discretise_on(&one_node(), scheme, mesh).unwrap().system
}

#[test]
fn lumped_linear_elements_conduct_as_volumes_do() {
    // Bank & Rose 1987, SIAM J. Numer. Anal. 24: on a Delaunay mesh.
    let g = three_wells();
    let mesh = Mesh::fit(&g, &MeshOptions::default()).unwrap();
    let linear = discretise_on(&g, Scheme::LinearLumped, mesh.clone())
        .unwrap()
        .system;
    let volume = discretise_on(&g, Scheme::FiniteVolume, mesh)
        .unwrap()
        .system;
    for (a, b) in linear.stiffness.iter().zip(&volume.stiffness) {
        let found = difference(a, b);
        assert!(found < 1e-12, "{found:e}");
    }
}

#[test]
fn volumes_are_differences_on_a_uniform_lattice() {
    let (a, b) = (
        system(Scheme::FiniteVolume, squares(12)),
        system(Scheme::FiniteDifference, squares(12)),
    );
    let blocks = a
        .mass
        .iter()
        .zip(&b.mass)
        .chain(a.stiffness.iter().zip(&b.stiffness));
    for (a, b) in blocks {
        let found = difference(a, b);
        assert!(found < 1e-12, "{:?}: {found:e}", a.parameter);
    }
}

/// Radius at which an endless ground has the pressure of the node that the source is, from places round it.
fn equivalent_radius(system: &System, places: &[[f64; 2]]) -> f64 {
    let x = transfer(system, 0.0, &system.wells);
    let at = |p: &[f64; 2]| {
        let near = |(q, _): &([f64; 2], usize)| (p[0] - q[0]).hypot(p[1] - q[1]) < 1e-9;
        x[(system.nodes.iter().position(near).unwrap(), 0)]
    };
    let middle = at(&[0.0, 0.0]);
    let logs: f64 = places
        .iter()
        .map(|p| p[0].hypot(p[1]).ln() - 2.0 * PI * T * (middle - at(p)))
        .sum();
    (logs / places.len() as f64).exp()
}

#[test]
fn a_node_of_a_square_lattice_is_a_well_of_a_fifth_of_the_spacing() {
    // exp(-gamma)/(2 sqrt 2) = 0.198506; Peaceman 1978, SPEJ 18, prints 0.1985 and 0.2. Along lines and diagonals what the
    // square outline and the lattice add to the logarithm is equal and opposite.
    for scheme in [
        Scheme::FiniteDifference,
        Scheme::FiniteVolume,
        Scheme::LinearLumped,
        Scheme::LinearConsistent,
    ] {
        let found = equivalent_radius(&system(scheme, squares(70)), &[[24.0, 0.0], [17.0, 17.0]]);
        assert!(
            (found / 0.198_505_904 - 1.0).abs() < 1e-3,
            "{scheme:?}: {found}"
        );
    }
}

#[test]
fn a_node_of_a_triangular_lattice_is_a_smaller_one() {
    // exp(-gamma)/sqrt 12 = 0.162079 of the side of equilateral triangles.
    let height = 0.5 * 3f64.sqrt();
    let round = [
        [16.0, 0.0],
        [8.0, 16.0 * height],
        [-8.0, 16.0 * height],
        [-16.0, 0.0],
    ];
    for scheme in [Scheme::FiniteVolume, Scheme::LinearLumped] {
        let found = equivalent_radius(&system(scheme, triangles(60)), &round);
        assert!(
            (found / 0.162_079_392 - 1.0).abs() < 1e-3,
            "{scheme:?}: {found}"
        );
    }
}

#[test]
fn the_edge_of_lattices_is_whole() {
    squares(5).check().unwrap();
    triangles(5).check().unwrap();
    let g = three_wells();
    discretise(&g, Scheme::FiniteDifference, &MeshOptions::default())
        .unwrap()
        .mesh
        .check()
        .unwrap();
}
