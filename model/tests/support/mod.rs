//! Sites and solvers that tests of the ground share.
#![allow(
    dead_code,
    unreachable_pub,
    clippy::unwrap_used,
    clippy::indexing_slicing,
    clippy::panic,
    reason = "each test file uses its own share of this one, and helpers of tests may fail loudly"
)]

use borewake_model::ground::{Edge, EdgeKind, Gauge, Ground, Layer, Neighbour, Point, Seat, Well};
use borewake_model::weak_form::{Functional, SparseBlock, System};
use faer::linalg::solvers::Solve;
use faer::sparse::{SparseColMat, Triplet};
use faer::{Mat, Side};

pub const T: f64 = 3.0e-9;
pub const S: f64 = 4.0e-9;

pub fn well(name: &str, at: Point) -> Well {
    Well {
        name: name.into(),
        at,
        layer: 0,
        also: Vec::new(),
        radius: 0.11,
        skin: 0.0,
        storage: 0.0,
        trace: Vec::new(),
    }
}

pub fn gauge(name: &str, seat: Seat) -> Gauge {
    Gauge {
        name: name.into(),
        seat,
        noise: 100.0,
        drift: 0.0,
    }
}

pub fn in_ground(at: Point) -> Seat {
    Seat::InGround { at, layer: 0 }
}

pub fn layer() -> Layer {
    Layer {
        name: "sand".into(),
        transmissivity: T,
        storativity: S,
        anisotropy: None,
        leakance_below: None,
    }
}

pub fn ground(kind: EdgeKind, distance: f64) -> Ground {
    Ground {
        layers: vec![layer()],
        zones: Vec::new(),
        edge: Edge { kind, distance },
        barriers: Vec::new(),
        stages: Vec::new(),
        wells: Vec::new(),
        gauges: Vec::new(),
        neighbours: Vec::new(),
    }
}

/// Three wells with a gauge each, six gauges apart, one neighbour; invented.
pub fn three_wells() -> Ground {
    let mut g = ground(EdgeKind::Open, 25_000.0);
    g.wells = vec![
        well("I-1", [0.0, 0.0]),
        well("I-2", [1210.0, 340.0]),
        well("I-3", [-420.0, 980.0]),
    ];
    g.gauges = (0..3)
        .map(|w| gauge(&format!("G-{w}"), Seat::InWell(w)))
        .collect();
    for (i, at) in [
        [610.0, -510.0],
        [-830.0, 120.0],
        [420.0, 610.0],
        [1650.0, 1100.0],
        [-1100.0, -900.0],
        [300.0, 1700.0],
    ]
    .into_iter()
    .enumerate()
    {
        g.gauges.push(gauge(&format!("O-{i}"), in_ground(at)));
    }
    g.neighbours = vec![Neighbour {
        name: "N".into(),
        at: [2400.0, -800.0],
        layer: 0,
    }];
    g
}

pub fn sum(
    size: usize,
    blocks: &[SparseBlock],
    factor: f64,
    into: &mut Vec<Triplet<usize, usize, f64>>,
) {
    for block in blocks {
        assert_eq!(block.matrix.nrows(), size);
        for t in block.matrix.triplet_iter() {
            into.push(Triplet::new(t.row, t.col, factor * *t.val));
        }
    }
}

/// `(K + s M)^-1` applied to one column per functional.
pub fn transfer(system: &System, s: f64, ports: &[Functional]) -> Mat<f64> {
    let mut entries = Vec::new();
    sum(system.size, &system.stiffness, 1.0, &mut entries);
    sum(system.size, &system.mass, s, &mut entries);
    let a = SparseColMat::<usize, f64>::try_new_from_triplets(system.size, system.size, &entries)
        .unwrap();
    let mut b = Mat::<f64>::zeros(system.size, ports.len());
    for (j, port) in ports.iter().enumerate() {
        for &(i, w) in &port.0 {
            b[(i, j)] += w;
        }
    }
    a.sp_cholesky(Side::Lower).unwrap().solve(&b)
}

pub fn value(functional: &Functional, x: &Mat<f64>, column: usize) -> f64 {
    functional.0.iter().map(|&(i, w)| w * x[(i, column)]).sum()
}
