//! Which unknown stands for which node of which layer.

use super::Functional;
use super::space::{MOST, Space};
use crate::ModelError;
use crate::ground::mesh::{Driver, Mesh, ordered};
use crate::ground::{EdgeKind, Ground, Point};

/// What became of a node.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Slot {
    /// It is this unknown, alone or tied to others.
    Unknown(usize),
    /// Its pressure is held at rest by a fixed edge.
    Held,
    /// It lies in a cut-out of its layer.
    Absent,
}

/// Unknowns of all layers.
#[derive(Debug, Clone)]
pub(super) struct Nodes {
    /// Sides of triangles in ascending order where they have nodes, else empty.
    sides: Vec<[usize; 2]>,
    vertices: usize,
    /// One list per layer: vertices, then sides.
    slots: Vec<Vec<Slot>>,
    /// Whether a triangle is cut out, one list per layer, by the well.
    cut: Vec<Vec<Option<usize>>>,
    /// The unknown of each well's ring or trace in each of its layers, in the order of [`crate::ground::Well::layers`].
    pub(super) rings: Vec<Vec<(usize, usize)>>,
    /// The unknown of each well's bore: the rings', or its own.
    pub(super) bores: Vec<usize>,
    /// Place and layer of each unknown.
    pub(super) places: Vec<(Point, usize)>,
}

impl Nodes {
    /// Numbers the unknowns: layer by layer, vertices before sides, bores last.
    pub(super) fn number(
        ground: &Ground,
        mesh: &Mesh,
        space: &dyn Space,
    ) -> Result<Self, ModelError> {
        for (what, found, expected) in [
            ("cut-outs of the mesh", mesh.wells.len(), ground.wells.len()),
            ("gauges of the mesh", mesh.gauges.len(), ground.gauges.len()),
            (
                "neighbours of the mesh",
                mesh.neighbours.len(),
                ground.neighbours.len(),
            ),
        ] {
            if found != expected {
                return Err(ModelError::Size {
                    what,
                    found,
                    expected,
                });
            }
        }
        let mut nodes = Self {
            sides: if space.midsides() {
                mesh.sides()
            } else {
                Vec::new()
            },
            vertices: mesh.points.len(),
            slots: Vec::new(),
            cut: Vec::new(),
            rings: vec![Vec::new(); ground.wells.len()],
            bores: Vec::new(),
            places: Vec::new(),
        };
        for layer in 0..ground.layers.len() {
            nodes.number_layer(ground, mesh, layer);
        }
        for (well, rings) in ground.wells.iter().zip(&nodes.rings) {
            let own = !well.skin_outside() && well.skin > 0.0;
            let ring = rings.first().map_or(0, |r| r.1);
            nodes
                .bores
                .push(if own { nodes.places.len() } else { ring });
            if own {
                nodes.places.push((well.at, well.layer));
            }
        }
        Ok(nodes)
    }

    fn number_layer(&mut self, ground: &Ground, mesh: &Mesh, layer: usize) {
        let mut cut = vec![None; mesh.triangles.len()];
        let mut tied: Vec<Option<usize>> = vec![None; self.vertices + self.sides.len()];
        for (w, (well, cut_out)) in ground.wells.iter().zip(&mesh.wells).enumerate() {
            if !well.meets(layer) {
                continue;
            }
            for &t in &cut_out.inside {
                if let Some(slot) = cut.get_mut(t) {
                    *slot = Some(w);
                }
            }
            for (i, &a) in cut_out.ring.iter().enumerate() {
                let b = cut_out.ring.get((i + 1) % cut_out.ring.len());
                for node in [Some(a), b.and_then(|&b| self.side(a, b))]
                    .into_iter()
                    .flatten()
                {
                    if let Some(slot) = tied.get_mut(node) {
                        *slot = Some(w);
                    }
                }
            }
        }
        for piece in &mesh.lines {
            let Driver::Well(w) = piece.of else { continue };
            if !ground.wells.get(w).is_some_and(|well| well.meets(layer)) {
                continue;
            }
            let [a, b] = piece.ends;
            for node in [Some(a), Some(b), self.side(a, b)].into_iter().flatten() {
                if let Some(slot) = tied.get_mut(node) {
                    *slot = Some(w);
                }
            }
        }
        let mut used = vec![false; tied.len()];
        for (t, gone) in cut.iter().enumerate() {
            if gone.is_none() {
                let (nodes, count) = self.numbers(mesh, t);
                for node in nodes.iter().take(count) {
                    if let Some(slot) = used.get_mut(*node) {
                        *slot = true;
                    }
                }
            }
        }
        let mut held = vec![false; tied.len()];
        if ground.edge.kind == EdgeKind::Fixed {
            for &[a, b] in &mesh.edge {
                for node in [Some(a), Some(b), self.side(a, b)].into_iter().flatten() {
                    if let Some(slot) = held.get_mut(node) {
                        *slot = true;
                    }
                }
            }
        }
        // Without skin the rings of all layers are one with the bore.
        let mut ring: Vec<Option<usize>> = ground
            .wells
            .iter()
            .zip(&self.rings)
            .map(|(well, rings)| rings.first().filter(|_| well.skin <= 0.0).map(|r| r.1))
            .collect();
        let mut slots = Vec::with_capacity(tied.len());
        for (node, ((used, held), well)) in used.iter().zip(&held).zip(&tied).enumerate() {
            slots.push(if !used {
                Slot::Absent
            } else if *held {
                Slot::Held
            } else if let Some(w) = *well
                && let (Some(ring), Some(at)) = (ring.get_mut(w), ground.wells.get(w))
            {
                let places = &mut self.places;
                Slot::Unknown(*ring.get_or_insert_with(|| {
                    places.push((at.at, layer));
                    places.len() - 1
                }))
            } else {
                self.places.push((self.point(mesh, node), layer));
                Slot::Unknown(self.places.len() - 1)
            });
        }
        for ((to, from), well) in self.rings.iter_mut().zip(ring).zip(&ground.wells) {
            if let Some(unknown) = from.filter(|_| well.meets(layer)) {
                to.push((layer, unknown));
            }
        }
        self.slots.push(slots);
        self.cut.push(cut);
    }

    /// The node in the middle of a side, where sides have nodes.
    fn side(&self, a: usize, b: usize) -> Option<usize> {
        self.sides
            .binary_search(&ordered(a, b))
            .ok()
            .map(|i| self.vertices + i)
    }

    fn point(&self, mesh: &Mesh, node: usize) -> Point {
        let vertex = |v: usize| mesh.points.get(v).copied().unwrap_or([f64::NAN; 2]);
        match node
            .checked_sub(self.vertices)
            .and_then(|i| self.sides.get(i))
        {
            Some(&[a, b]) => {
                let (a, b) = (vertex(a), vertex(b));
                [0.5 * (a[0] + b[0]), 0.5 * (a[1] + b[1])]
            }
            None => vertex(node),
        }
    }

    /// Node numbers of a triangle within one layer, and how many there are.
    fn numbers(&self, mesh: &Mesh, triangle: usize) -> ([usize; MOST], usize) {
        let [a, b, c] = mesh.triangles.get(triangle).copied().unwrap_or_default();
        match (self.side(b, c), self.side(c, a), self.side(a, b)) {
            (Some(d), Some(e), Some(f)) => ([a, b, c, d, e, f], 6),
            _ => ([a, b, c, 0, 0, 0], 3),
        }
    }

    fn slot(&self, layer: usize, node: usize) -> Slot {
        let slot = self.slots.get(layer).and_then(|l| l.get(node));
        slot.copied().unwrap_or(Slot::Absent)
    }

    /// What stands for the nodes of a triangle in a layer; `None` where it is cut out there.
    pub(super) fn triangle(
        &self,
        mesh: &Mesh,
        triangle: usize,
        layer: usize,
    ) -> Option<[Slot; MOST]> {
        if self.cut_by(triangle, layer).is_some() {
            return None;
        }
        let (nodes, _) = self.numbers(mesh, triangle);
        Some(nodes.map(|node| self.slot(layer, node)))
    }

    /// What stands for the nodes of a segment in a layer.
    pub(super) fn segment(&self, [a, b]: [usize; 2], layer: usize) -> [Slot; MOST] {
        let mut slots = [Slot::Absent; MOST];
        let nodes = [Some(a), Some(b), self.side(a, b)];
        for (slot, node) in slots.iter_mut().zip(nodes) {
            if let Some(node) = node {
                *slot = self.slot(layer, node);
            }
        }
        slots
    }

    fn cut_by(&self, triangle: usize, layer: usize) -> Option<usize> {
        self.cut
            .get(layer)
            .and_then(|l| l.get(triangle))
            .copied()
            .flatten()
    }

    /// The value at a vertex.
    pub(super) fn at_vertex(&self, vertex: usize, layer: usize) -> Functional {
        match self.slot(layer, vertex) {
            Slot::Unknown(i) => Functional(vec![(i, 1.0)]),
            Slot::Held | Slot::Absent => Functional::default(),
        }
    }

    /// The value at any point inside the edge.
    pub(super) fn locate(
        &self,
        mesh: &Mesh,
        space: &dyn Space,
        point: Point,
        layer: usize,
    ) -> Result<Functional, ModelError> {
        let fail = |why: &str| ModelError::Mesh {
            x: point[0],
            y: point[1],
            why: why.to_owned(),
        };
        if layer >= self.slots.len() {
            return Err(fail("there is no such layer"));
        }
        let mut best: Option<(usize, [f64; 3], f64)> = None;
        for t in 0..mesh.triangles.len() {
            let shares = shares(&mesh.corners(t), point);
            let least = shares.iter().copied().fold(f64::INFINITY, f64::min);
            if best.as_ref().is_none_or(|b| least > b.2) {
                best = Some((t, shares, least));
            }
            if least >= 0.0 {
                break;
            }
        }
        // A point on a side may fall a rounding outside both of its triangles.
        let Some((triangle, shares, _)) = best.filter(|b| b.2 > -1e-9) else {
            return Err(fail(
                "the point lies outside the edge; give the edge a larger distance",
            ));
        };
        if let Some(well) = self.cut_by(triangle, layer) {
            let rings = self.rings.get(well).into_iter().flatten();
            let ring = rings.filter(|(l, _)| *l == layer).map(|r| (r.1, 1.0));
            return Ok(Functional(ring.collect()));
        }
        let (nodes, count) = self.numbers(mesh, triangle);
        let values = space.values(&mesh.corners(triangle), shares);
        let mut list: Vec<(usize, f64)> = Vec::new();
        for (&node, value) in nodes.iter().zip(values).take(count) {
            let Slot::Unknown(i) = self.slot(layer, node) else {
                continue;
            };
            match list.iter_mut().find(|(j, _)| *j == i) {
                Some((_, sum)) => *sum += value,
                None if value != 0.0 => list.push((i, value)),
                None => {}
            }
        }
        list.sort_unstable_by_key(|(i, _)| *i);
        Ok(Functional(list))
    }
}

/// Shares of the corners at a point (barycentric coordinates); negative outside.
fn shares(&[a, b, c]: &[Point; 3], p: Point) -> [f64; 3] {
    let cross = |u: Point, v: Point, w: Point| {
        (v[0] - u[0]) * (w[1] - u[1]) - (v[1] - u[1]) * (w[0] - u[0])
    };
    let whole = cross(a, b, c);
    [
        cross(p, b, c) / whole,
        cross(a, p, c) / whole,
        cross(a, b, p) / whole,
    ]
}
