//! An invented site that the examples share, and a stopwatch.
#![allow(dead_code, reason = "each example uses its own share of this file")]
#![allow(
    clippy::indexing_slicing,
    clippy::unwrap_used,
    reason = "an example may stop at a site that it made up itself"
)]

use std::time::Instant;

use borewake_model::ground::{Edge, EdgeKind, Gauge, Ground, Layer, Neighbour, Seat, Well};

/// `T = k h / mu` \[m3/(Pa s)\]: 120 mD, 20 m, 0.8 cP.
pub(crate) const TRANSMISSIVITY: f64 = 3.0e-9;
/// `S = phi c_t h` \[m/Pa\].
pub(crate) const STORATIVITY: f64 = 4.0e-9;
/// Radius of every well \[m\].
pub(crate) const WELL_RADIUS: f64 = 0.11;
/// One day \[s\].
pub(crate) const DAY: f64 = 86_400.0;

/// Three wells with a gauge each, six gauges apart, a neighbour, an open edge.
///
/// Where a year of pressure must not reach the edge it stands 3.5 times the diffusion length of that year away.
pub(crate) fn ground() -> Ground {
    let year = 365.25 * DAY;
    let well = |name: &str, at| Well {
        name: name.into(),
        at,
        layer: 0,
        also: Vec::new(),
        radius: WELL_RADIUS,
        skin: 0.0,
        storage: 0.0,
        trace: Vec::new(),
    };
    let gauge = |name: String, seat| Gauge {
        name,
        seat,
        noise: 40.0,
        drift: 0.0,
    };
    let apart = [
        [610.0, -510.0],
        [-830.0, 120.0],
        [420.0, 610.0],
        [1650.0, 1100.0],
        [-1100.0, -900.0],
        [300.0, 1700.0],
    ];
    let in_wells = (0..3).map(|w| gauge(format!("W-{}", w + 1), Seat::InWell(w)));
    let in_ground = apart
        .iter()
        .enumerate()
        .map(|(i, &at)| gauge(format!("O-{}", i + 1), Seat::InGround { at, layer: 0 }));
    Ground {
        layers: vec![Layer {
            name: "sand".into(),
            transmissivity: TRANSMISSIVITY,
            storativity: STORATIVITY,
            anisotropy: None,
            leakance_below: None,
        }],
        zones: Vec::new(),
        edge: Edge {
            kind: EdgeKind::Open,
            distance: 3.5 * (TRANSMISSIVITY / STORATIVITY * year).sqrt(),
        },
        barriers: Vec::new(),
        stages: Vec::new(),
        wells: vec![
            well("I-1", [0.0, 0.0]),
            well("I-2", [1210.0, 340.0]),
            well("I-3", [-420.0, 980.0]),
        ],
        gauges: in_wells.chain(in_ground).collect(),
        neighbours: vec![Neighbour {
            name: "N-1".into(),
            at: [2400.0, -800.0],
            layer: 0,
        }],
    }
}

/// Distance from the middle of a well to where gauge `index` feels it \[m\]: the well's own radius in its own bore.
pub(crate) fn distance(ground: &Ground, well: usize, index: usize) -> f64 {
    let (from, (to, _)) = (ground.wells[well].at, ground.gauge_at(index).unwrap());
    if matches!(ground.gauges[index].seat, Seat::InWell(w) if w == well) {
        WELL_RADIUS
    } else {
        (to[0] - from[0]).hypot(to[1] - from[1])
    }
}

/// Processor seconds of this thread, where the system tells them, so that other work on the machine does not count.
pub(crate) struct Stopwatch {
    wall: Instant,
    processor: Option<f64>,
}

impl Stopwatch {
    pub(crate) fn start() -> Self {
        Self {
            wall: Instant::now(),
            processor: processor_seconds(),
        }
    }

    /// Seconds since the start.
    pub(crate) fn seconds(&self) -> f64 {
        match (self.processor, processor_seconds()) {
            (Some(from), Some(to)) => to - from,
            _ => self.wall.elapsed().as_secs_f64(),
        }
    }
}

/// Linux keeps nanoseconds on the processor as the first number of this file.
fn processor_seconds() -> Option<f64> {
    let text = std::fs::read_to_string("/proc/thread-self/schedstat").ok()?;
    text.split(' ')
        .next()?
        .parse::<f64>()
        .ok()
        .map(|ns| ns * 1e-9)
}

/// Largest memory this process has held so far \[MB\], where the system tells it.
pub(crate) fn peak_memory() -> f64 {
    let text = std::fs::read_to_string("/proc/self/status").unwrap_or_default();
    let line = text.lines().find_map(|l| l.strip_prefix("VmHWM:"));
    let kilobytes = line.and_then(|l| l.trim().strip_suffix(" kB")?.parse::<f64>().ok());
    kilobytes.map_or(f64::NAN, |k| k / 1024.0)
}

/// Log-spaced times \[s\].
pub(crate) fn log_times(first: f64, last: f64, count: u32) -> Vec<f64> {
    (0..count)
        .map(|k| first * (last / first).powf(f64::from(k) / f64::from(count - 1)))
        .collect()
}
