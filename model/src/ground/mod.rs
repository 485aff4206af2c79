//! What is under the site: layers, zones, barriers, edge and wells, and the mesh fitted to them.

pub mod mesh;
mod patches;

pub use patches::Patches;

use serde::{Deserialize, Serialize};

/// A point on the map, metres east and north of the local origin.
pub type Point = [f64; 2];

/// The ground of a site, as described (before calibration). SI throughout.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Ground {
    /// Conducting layers, top first; at least one.
    pub layers: Vec<Layer>,
    /// Parts of layers with properties of their own; where they overlap the last listed holds.
    pub zones: Vec<Zone>,
    /// The outer boundary, shared by all layers.
    pub edge: Edge,
    /// Lines that resist flow.
    pub barriers: Vec<Barrier>,
    /// Lines along which the ground meets open water of a known level.
    pub stages: Vec<Stage>,
    /// Wells whose rates are known.
    pub wells: Vec<Well>,
    /// Pressure gauges.
    pub gauges: Vec<Gauge>,
    /// Wells of others: places known, rates not.
    pub neighbours: Vec<Neighbour>,
}

/// A conducting layer.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Layer {
    /// Name in the site file.
    pub name: String,
    /// `T = k h / mu` \[m3/(Pa s)\], positive; the geometric mean of the greatest and the least by direction.
    pub transmissivity: f64,
    /// `S = phi c_t h` \[m/Pa\], positive.
    pub storativity: f64,
    /// How conduction depends on direction; `None` where it does not.
    pub anisotropy: Option<Anisotropy>,
    /// Exchange with the next layer below \[m/(Pa s)\]; `None` where there is none.
    pub leakance_below: Option<f64>,
}

/// Conduction that depends on direction.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Anisotropy {
    /// Greatest transmissivity over least, one or more.
    pub ratio: f64,
    /// Direction of the greatest, counter-clockwise from east \[radians\].
    pub direction: f64,
}

/// A symmetric matrix of determinant one that scales conduction by direction.
pub type Tensor = [[f64; 2]; 2];

/// Conduction the same in all directions.
pub const ISOTROPIC: Tensor = [[1.0, 0.0], [0.0, 1.0]];

impl Anisotropy {
    /// The tensor of determinant one.
    #[must_use]
    pub fn tensor(&self) -> Tensor {
        if self.ratio == 1.0 {
            return ISOTROPIC;
        }
        let (sin, cos) = self.direction.sin_cos();
        let (most, least) = (self.ratio.sqrt(), self.ratio.sqrt().recip());
        let across = (most - least) * sin * cos;
        [
            [most * cos * cos + least * sin * sin, across],
            [across, most * sin * sin + least * cos * cos],
        ]
    }
}

impl Layer {
    /// Conduction by direction, of determinant one.
    #[must_use]
    pub fn tensor(&self) -> Tensor {
        self.anisotropy.map_or(ISOTROPIC, |a| a.tensor())
    }
}

/// A part of a layer with properties of its own. It takes the anisotropy of its layer.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Zone {
    /// Name in the site file.
    pub name: String,
    /// Layer, by order.
    pub layer: usize,
    /// Its corners in order, at least three; the last joins the first. What lies beyond the edge does not count.
    pub outline: Vec<Point>,
    /// `T = k h / mu` \[m3/(Pa s)\], positive.
    pub transmissivity: f64,
    /// `S = phi c_t h` \[m/Pa\], positive.
    pub storativity: f64,
}

impl Zone {
    /// Whether a point lies inside the outline.
    #[must_use]
    pub fn holds(&self, point: Point) -> bool {
        let last = self.outline.last().copied();
        let starts = last.into_iter().chain(self.outline.iter().copied());
        let mut inside = false;
        for (a, b) in starts.zip(&self.outline) {
            if (a[1] > point[1]) != (b[1] > point[1]) {
                let x = a[0] + (point[1] - a[1]) / (b[1] - a[1]) * (b[0] - a[0]);
                inside ^= point[0] < x;
            }
        }
        inside
    }
}

/// The outer boundary.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Edge {
    /// How it behaves.
    pub kind: EdgeKind,
    /// Distance from the centre of wells and gauges \[m\].
    pub distance: f64,
}

/// How the outer boundary behaves.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum EdgeKind {
    /// The ground goes on: the edge is far and lets pressure out as an endless ground would.
    Open,
    /// Nothing passes.
    Closed,
    /// The pressure is held at rest.
    Fixed,
    /// The pressure is that of open water of a known level.
    Driven,
}

/// A line along which the ground meets open water: a river, a canal, a pool.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Stage {
    /// Name in the site file.
    pub name: String,
    /// Its corners, at least two.
    pub line: Vec<Point>,
    /// Layer, by order.
    pub layer: usize,
    /// Flow through its bed per metre of line and Pascal of difference \[m3/(Pa s m)\], positive.
    pub conductance: f64,
}

/// A line that resists flow.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Barrier {
    /// Name in the site file.
    pub name: String,
    /// Its corners, at least two.
    pub line: Vec<Point>,
    /// Flow per metre of line and Pascal of difference \[m3/(Pa s m)\], from zero (sealed) up.
    pub conductance: f64,
}

/// A well whose rate is known.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Well {
    /// Name in the site file.
    pub name: String,
    /// Where it meets the ground.
    pub at: Point,
    /// Layer, by order.
    pub layer: usize,
    /// Further layers it is open to, each once. One bore of one pressure joins them all.
    pub also: Vec<usize>,
    /// Radius \[m\].
    pub radius: f64,
    /// Skin, -6 to 50, the same in every layer.
    pub skin: f64,
    /// Wellbore storage \[m3/Pa\]; zero where it does not matter.
    pub storage: f64,
    /// Corners of the line along which a horizontal well or a fracture meets the ground, one pressure all along;
    /// empty for a well that meets it at a point.
    pub trace: Vec<Point>,
}

impl Well {
    /// All layers it is open to.
    pub fn layers(&self) -> impl Iterator<Item = usize> + '_ {
        std::iter::once(self.layer).chain(self.also.iter().copied())
    }

    /// Whether it is open to a layer.
    #[must_use]
    pub fn meets(&self, layer: usize) -> bool {
        self.layer == layer || self.also.contains(&layer)
    }

    /// Whether its skin acts outside the matrices: what passes the skin is then the rate at the well, at any time. It
    /// is not so where the bore stores some of the rate, or where the rate divides among layers.
    #[must_use]
    pub fn skin_outside(&self) -> bool {
        self.storage <= 0.0 && self.also.is_empty()
    }
}

/// A pressure gauge.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Gauge {
    /// Name in the site file.
    pub name: String,
    /// Where it sits.
    pub seat: Seat,
    /// Standard deviation of one reading about the truth \[Pa\].
    pub noise: f64,
    /// Drift within specification \[Pa/s\].
    pub drift: f64,
}

/// Where a gauge sits.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Seat {
    /// In the bore of a well, by order: it feels that well's skin and storage.
    InWell(usize),
    /// In the ground.
    InGround {
        /// Where.
        at: Point,
        /// Layer, by order.
        layer: usize,
    },
}

/// A well of somebody else's.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Neighbour {
    /// Name in the site file.
    pub name: String,
    /// Where it meets the ground.
    pub at: Point,
    /// Layer, by order.
    pub layer: usize,
}

impl Ground {
    /// Number of known inputs: the rate of every well, then the pressure of every stage, then that of the edge where it
    /// is [`EdgeKind::Driven`]. A block holds one path for each, in this order.
    #[must_use]
    pub fn inputs(&self) -> usize {
        self.wells.len() + self.stages.len() + usize::from(self.edge.kind == EdgeKind::Driven)
    }

    /// The zone that holds a point of a layer, by order: the last of those whose outline holds it.
    #[must_use]
    pub fn zone_at(&self, point: Point, layer: usize) -> Option<usize> {
        self.zones
            .iter()
            .rposition(|zone| zone.layer == layer && zone.holds(point))
    }

    /// Where gauge `index` sits: position and layer.
    #[must_use]
    pub fn gauge_at(&self, index: usize) -> Option<(Point, usize)> {
        match self.gauges.get(index)?.seat {
            Seat::InGround { at, layer } => Some((at, layer)),
            Seat::InWell(well) => self.wells.get(well).map(|w| (w.at, w.layer)),
        }
    }
}
