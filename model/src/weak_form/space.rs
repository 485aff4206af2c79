//! What a scheme must answer so that the weak statement can be put into it.

use crate::ground::{Point, Tensor};

/// Most nodes of one triangle in any scheme.
pub(super) const MOST: usize = 6;

/// A small symmetric matrix between the nodes of one triangle or segment.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Local {
    /// Nodes in use.
    pub(super) size: usize,
    /// Entries; those beyond `size` are zero.
    pub(super) entries: [[f64; MOST]; MOST],
}

impl Local {
    /// The zero matrix.
    pub(super) fn zero(size: usize) -> Self {
        Self {
            size,
            entries: [[0.0; MOST]; MOST],
        }
    }

    /// A matrix from its rows, each times `factor`.
    pub(super) fn scaled<const N: usize>(factor: f64, rows: &[[f64; N]; N]) -> Self {
        let mut local = Self::zero(N);
        for (to, from) in local.entries.iter_mut().zip(rows) {
            for (to, from) in to.iter_mut().zip(from) {
                *to = factor * from;
            }
        }
        local
    }
}

/// A trial space, the test space that goes with it, and its rule for flux or quadrature.
///
/// Nodes of a triangle come as its corners 0, 1, 2 and then, where sides have nodes, the middles of the sides
/// opposite to corners 0, 1, 2. Nodes of a segment come as its ends and then its middle.
pub(super) trait Space: Sync {
    /// Whether every side has a node in its middle.
    fn midsides(&self) -> bool;

    /// The integral of `w p` over a triangle \[m2\].
    fn storage(&self, corners: &[Point; 3]) -> Local;

    /// Whether conduction by this tensor can be put into the space.
    fn takes(&self, tensor: &Tensor) -> bool;

    /// The integral of `grad w . A grad p` over a triangle, or the flux that stands for it.
    fn conduction(&self, corners: &[Point; 3], tensor: &Tensor) -> Local;

    /// The integral of `w p` along a segment of this length \[m\].
    fn line(&self, length: f64) -> Local;

    /// The value of `w` for each node of the triangle at a point in it, given as shares of the corners.
    fn values(&self, corners: &[Point; 3], shares: [f64; 3]) -> [f64; MOST];
}

/// Gradients of the three linear hat functions on a triangle, and its area.
pub(super) fn gradients(&[a, b, c]: &[Point; 3]) -> ([Point; 3], f64) {
    let twice = (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0]);
    let of = |p: Point, q: Point| [(p[1] - q[1]) / twice, (q[0] - p[0]) / twice];
    ([of(b, c), of(c, a), of(a, b)], 0.5 * twice)
}

/// `a . A b`, to the bit the same as `b . A a`.
pub(super) fn product(a: Point, tensor: &Tensor, b: Point) -> f64 {
    let [[xx, xy], [_, yy]] = *tensor;
    xx * (a[0] * b[0]) + xy * (a[0] * b[1] + a[1] * b[0]) + yy * (a[1] * b[1])
}
