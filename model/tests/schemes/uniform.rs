//! Uniform lattices, square and of equilateral triangles.

use borewake_model::ground::mesh::{CutOut, Mesh};
use borewake_model::ground::{EdgeKind, Ground};

use crate::support::{ground, well};

fn mesh(
    points: Vec<[f64; 2]>,
    triangles: Vec<[usize; 3]>,
    edge: Vec<[usize; 2]>,
    middle: usize,
) -> Mesh {
    Mesh {
        points,
        triangles,
        wells: vec![CutOut {
            ring: vec![middle],
            inside: Vec::new(),
            middle,
        }],
        edge,
        joints: Vec::new(),
        lines: Vec::new(),
        gauges: Vec::new(),
        neighbours: Vec::new(),
        centre: [0.0, 0.0],
        radius: 1000.0,
    }
}

/// A ground whose one well is the node in the middle, and whose edge is held.
pub(crate) fn one_node() -> Ground {
    let mut g = ground(EdgeKind::Fixed, 1000.0);
    g.wells = vec![well("W", [0.0, 0.0])];
    g
}

/// Squares of side one, `half` to each side of the middle, halved by a diagonal.
pub(crate) fn squares(half: usize) -> Mesh {
    let n = 2 * half + 1;
    let at = |k: usize| k as f64 - half as f64;
    let points = (0..n * n).map(|k| [at(k % n), at(k / n)]).collect();
    let (mut triangles, mut edge) = (Vec::new(), Vec::new());
    for j in 0..n - 1 {
        edge.extend([[j, j + 1], [n * n - 1 - j, n * n - 2 - j]]);
        edge.extend([[(j + 1) * n, j * n], [(j + 1) * n - 1, (j + 2) * n - 1]]);
        for i in 0..n - 1 {
            let a = j * n + i;
            triangles.extend([[a, a + 1, a + n + 1], [a, a + n + 1, a + n]]);
        }
    }
    mesh(points, triangles, edge, half * n + half)
}

/// Equilateral triangles of side one in a hexagon of side `half`.
pub(crate) fn triangles(half: usize) -> Mesh {
    let reach = i32::try_from(half).unwrap();
    let inside = |i: i32, j: i32| i.abs() <= reach && j.abs() <= reach && (i + j).abs() <= reach;
    let mut number = std::collections::BTreeMap::new();
    let mut points = Vec::new();
    for j in -reach..=reach {
        for i in -reach..=reach {
            if inside(i, j) {
                number.insert((i, j), points.len());
                points.push([
                    f64::from(i) + 0.5 * f64::from(j),
                    0.5 * 3f64.sqrt() * f64::from(j),
                ]);
            }
        }
    }
    let mut list = Vec::new();
    for &(i, j) in number.keys() {
        let corner = |di: i32, dj: i32| number.get(&(i + di, j + dj)).copied();
        for (b, c) in [((1, 0), (0, 1)), ((0, 1), (-1, 1))] {
            if let (Some(a), Some(b), Some(c)) = (corner(0, 0), corner(b.0, b.1), corner(c.0, c.1))
            {
                list.push([a, b, c]);
            }
        }
    }
    // A side that one triangle has and none the other way round is part of the edge.
    let sides: std::collections::BTreeSet<[usize; 2]> = list
        .iter()
        .flat_map(|&[a, b, c]| [[a, b], [b, c], [c, a]])
        .collect();
    let edge = sides
        .iter()
        .filter(|[a, b]| !sides.contains(&[*b, *a]))
        .copied()
        .collect();
    mesh(points, list, edge, number[&(0, 0)])
}
