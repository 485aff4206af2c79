//! The fence round the triangulation library: what it cannot take becomes an error with a place.

use std::panic::catch_unwind;

use spade::handles::FixedVertexHandle;
use spade::{ConstrainedDelaunayTriangulation, Point2, Triangulation};

use super::super::Point;
use super::distance;
use crate::ModelError;

type Constrained = ConstrainedDelaunayTriangulation<Point2<f64>>;

/// The constrained Delaunay triangles of a point set whose hull is the domain, counter-clockwise.
///
/// Points keep their numbers. No two may lie closer than `apart`, no two constraints may cross.
pub(super) fn triangulate(
    points: &[Point],
    constraints: &[[usize; 2]],
    apart: f64,
) -> Result<Vec<[usize; 3]>, ModelError> {
    reject_near_duplicates(points, apart)?;
    // The library panics on some inputs it should take. It holds no state of ours, so nothing is left half done.
    let outcome = catch_unwind(|| fenced(points, constraints));
    outcome.unwrap_or_else(|_| {
        let at = points.first().copied().unwrap_or_default();
        Err(fail(
            at,
            "the triangulation broke down; move a well, gauge or barrier corner by a metre",
        ))
    })
}

fn fenced(points: &[Point], constraints: &[[usize; 2]]) -> Result<Vec<[usize; 3]>, ModelError> {
    let vertices = points.iter().map(|p| Point2::new(p[0], p[1])).collect();
    let mut mesh = Constrained::bulk_load_cdt(vertices, Vec::new()).map_err(|error| {
        let at = points
            .iter()
            .copied()
            .find(|p| !p[0].is_finite() || !p[1].is_finite());
        fail(
            at.unwrap_or_default(),
            &format!("a point cannot be used ({error})"),
        )
    })?;
    if mesh.num_vertices() != points.len() {
        return Err(fail(
            points.first().copied().unwrap_or_default(),
            "two points fall together",
        ));
    }
    for &[a, b] in constraints {
        let (from, to) = (
            FixedVertexHandle::from_index(a),
            FixedVertexHandle::from_index(b),
        );
        // Adding a constraint across another one panics.
        if !mesh.can_add_constraint(from, to) {
            let at = points.get(a).copied().unwrap_or_default();
            return Err(fail(
                at,
                "lines cross here; give both a corner at the crossing",
            ));
        }
        mesh.add_constraint(from, to);
    }
    Ok(mesh
        .inner_faces()
        .map(|face| face.vertices().map(|v| v.fix().index()))
        .collect())
}

fn reject_near_duplicates(points: &[Point], apart: f64) -> Result<(), ModelError> {
    let mut order: Vec<Point> = points.to_vec();
    order.sort_by(|a, b| a[0].total_cmp(&b[0]).then(a[1].total_cmp(&b[1])));
    for (i, a) in order.iter().enumerate() {
        let near = order
            .iter()
            .skip(i + 1)
            .take_while(|b| b[0] - a[0] <= apart);
        for b in near {
            if distance(*a, *b) <= apart {
                return Err(fail(
                    *a,
                    "two points fall together; move one of them by a metre",
                ));
            }
        }
    }
    Ok(())
}

/// A mesh error at a place.
pub(super) fn fail(at: Point, why: &str) -> ModelError {
    ModelError::Mesh {
        x: at[0],
        y: at[1],
        why: why.to_owned(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const SQUARE: [Point; 4] = [[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]];

    #[test]
    fn a_square_has_two_triangles_along_its_constraint() {
        for constraint in [[0, 2], [1, 3]] {
            let triangles = triangulate(&SQUARE, &[constraint], 1e-9).unwrap();
            assert_eq!(triangles.len(), 2);
            assert!(
                triangles
                    .iter()
                    .all(|t| constraint.iter().all(|v| t.contains(v)))
            );
        }
    }

    #[test]
    fn what_the_library_cannot_take_is_an_error() {
        let crossing = triangulate(&SQUARE, &[[0, 2], [1, 3]], 1e-9).unwrap_err();
        assert!(crossing.to_string().contains("cross"), "{crossing}");
        let mut near = SQUARE.to_vec();
        near.push([1.0 + 1e-10, 1.0]);
        let doubled = triangulate(&near, &[], 1e-9).unwrap_err();
        assert!(doubled.to_string().contains("fall together"), "{doubled}");
        let mut lost = SQUARE.to_vec();
        lost.push([f64::NAN, 0.5]);
        assert!(triangulate(&lost, &[], 1e-9).is_err());
    }
}
