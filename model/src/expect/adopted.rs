//! Accepted findings as nuisances: the watch goes on past them.
//!
//! An adopted cause is not known exactly, so it is no single signature. A source gets the leading directions of all
//! signatures that its spread of place, onset and growth allows (principal components of the sampled prior, Loeve 1955),
//! and each gauge may see it a little stronger or weaker, as a varying ground will have it. A step gets free readings
//! round its onset, a meter the rate since then.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over modes, gauges and samples counted here"
)]

use nalgebra::{DMatrix, DVector};

use super::drive::{Sampled, Tables};
use super::frame::{Frame, seen};
use crate::commission::Places;
use crate::commission::places::distance;
use crate::finding::{Cause, Subject};
use crate::ground::Ground;
use crate::watch::Adoption;
use crate::weigh::bank::{GROWTHS, shape};

/// Most directions of a source.
const DIRECTIONS: usize = 26;
/// Most places sampled.
const SAMPLED: usize = 10;
/// Lags at which signatures are sampled \[days\].
const LAGS: [f64; 17] = [
    -0.5, -0.2, 0.0, 0.05, 0.1, 0.2, 0.4, 0.7, 1.2, 2.0, 3.5, 6.0, 10.0, 17.0, 30.0, 50.0, 90.0,
];
/// Blocks before and after the onset that a step may fall into, at most.
const ROUND: i64 = 4;
/// Seconds in a day.
const DAY: f64 = 86_400.0;

/// One accepted finding, ready to give rows.
#[derive(Debug, Clone)]
pub(crate) struct Adopted {
    /// First block with a row.
    pub(crate) from: i64,
    /// First block judged with it.
    pub(crate) judged: i64,
    /// Whether the sums of barriers begin anew with it: what they stand for has no onset.
    pub(crate) anew: bool,
    what: What,
}

#[derive(Debug, Clone)]
enum What {
    Source {
        /// Growth and onset of each part.
        parts: Vec<(f64, f64)>,
        /// By part: ports times mixture (modes by directions).
        mixed: Vec<DMatrix<f64>>,
        /// By part: ports of the mean place, for the gauges' own mismatch.
        middle: DVector<f64>,
        /// Onset \[s\].
        onset: f64,
        /// Prior size of a gauge's mismatch \[m3/s\].
        mismatch: f64,
    },
    Gauges {
        /// Gauge, prior of its step \[Pa\], prior of its ramp \[Pa/s\].
        each: Vec<(usize, f64, f64)>,
        /// Block of the onset, and blocks on either side that stay free.
        onset: i64,
        round: i64,
    },
    Meter {
        well: usize,
        sd: f64,
        onset: i64,
        round: i64,
    },
    Lines {
        /// Fan lines.
        lines: Vec<usize>,
        sd: f64,
    },
    Nothing,
}

/// What one block gives an adopted finding.
pub(crate) struct AdoptedBlock<'a> {
    pub(crate) frame: &'a Frame,
    pub(crate) tables: &'a Tables,
    pub(crate) sampled: &'a Sampled,
    pub(crate) entering: &'a [f64],
    pub(crate) block: i64,
    pub(crate) skins: &'a [(usize, usize, f64)],
}

impl Adopted {
    /// Prepares an adoption.
    pub(crate) fn new(
        adoption: &Adoption,
        ground: &Ground,
        frame: &Frame,
        places: &Places,
        block: f64,
        mismatch: f64,
        noise: &[f64],
    ) -> Self {
        let onset_block = (adoption.onset / block).floor();
        let size = adoption.size.map_or((0.0, 0.0), |s| (s.value.abs(), s.sd));
        let sd = 1.5 * size.0 + 3.0 * size.1;
        #[expect(
            clippy::cast_possible_truncation,
            reason = "a block number far below 2^53"
        )]
        let onset = if onset_block.is_finite() {
            onset_block as i64
        } else {
            adoption.block
        };
        let what = match (adoption.cause, adoption.subject) {
            (Cause::Leak | Cause::CrossLayer | Cause::Interference | Cause::Support, subject) => {
                source(adoption, subject, frame, places, sd, mismatch, noise)
            }
            (
                Cause::GaugeStep | Cause::GaugeDrift | Cause::GaugeScale | Cause::GaugeClock,
                Some(Subject::Gauge(gauge)),
            ) => {
                let floor = ground.gauges.get(gauge).map_or(0.0, |g| g.noise);
                let drift = ground.gauges.get(gauge).map_or(0.0, |g| g.drift);
                let each = if adoption.cause == Cause::GaugeStep {
                    (gauge, sd + 10.0 * floor, 10.0 * drift)
                } else {
                    (gauge, 20.0 * floor, sd + 10.0 * drift)
                };
                What::Gauges {
                    each: vec![each],
                    onset,
                    round: ROUND,
                }
            }
            (Cause::MeterScale | Cause::WellSkin, Some(Subject::Well(well))) => What::Meter {
                well,
                sd: sd.max(0.02),
                onset,
                round: 1,
            },
            (Cause::Barrier, _) => {
                let foot = adoption.place.map_or(places.centre, |p| [p.x, p.y]);
                let mut order: Vec<usize> = (0..places.lines.len()).collect();
                let away = |i: &usize| {
                    let line = places.lines.get(*i);
                    line.map_or(f64::MAX, |l| distance(l.foot(places.centre), foot))
                };
                order.sort_by(|a, b| away(a).total_cmp(&away(b)));
                order.truncate(8);
                What::Lines {
                    lines: order,
                    sd: 0.7,
                }
            }
            (Cause::Unexplained, _) => What::Gauges {
                each: (0..ground.gauges.len())
                    .map(|g| {
                        let floor = ground.gauges.get(g).map_or(1.0, |x| x.noise);
                        (g, 1000.0 * floor, 1000.0 * floor / (10.0 * DAY))
                    })
                    .collect(),
                onset: adoption.block,
                round: 0,
            },
            _ => What::Nothing,
        };
        let from = match &what {
            What::Gauges { onset, round, .. } | What::Meter { onset, round, .. } => onset - round,
            What::Source { parts, .. } => {
                let first = parts.iter().map(|p| p.1).fold(f64::MAX, f64::min);
                #[expect(
                    clippy::cast_possible_truncation,
                    reason = "a block number far below 2^53"
                )]
                let first = (first / block).floor() as i64;
                first
            }
            What::Lines { .. } | What::Nothing => adoption.block,
        };
        let anew = matches!(adoption.cause, Cause::Barrier | Cause::Unexplained);
        Self {
            from,
            judged: adoption.block,
            anew,
            what,
        }
    }

    /// Number of columns.
    pub(crate) fn columns(&self, gauges: usize) -> usize {
        match &self.what {
            What::Source { mixed, .. } => mixed.first().map_or(0, DMatrix::ncols) + 2 * gauges,
            What::Gauges { each, round, .. } => {
                each.len() * (2 + usize::try_from(2 * round + 1).unwrap_or(0))
            }
            What::Meter { round, .. } => 1 + usize::try_from(2 * round + 1).unwrap_or(0),
            What::Lines { lines, .. } => lines.len(),
            What::Nothing => 0,
        }
    }

    /// Lines of the fan whose filter states the columns take over, with the scale of the columns.
    pub(crate) fn lines(&self) -> Option<(&[usize], f64)> {
        match &self.what {
            What::Lines { lines, sd } => Some((lines, *sd)),
            _ => None,
        }
    }

    /// Rows of a block (gauges by columns); `memory` holds unit-port states of a meter's rates. `lines` are the raw
    /// signatures of the fan.
    pub(crate) fn rows(
        &self,
        memory: &mut DMatrix<f64>,
        with: &AdoptedBlock<'_>,
        lines: &DMatrix<f64>,
    ) -> DMatrix<f64> {
        let gauges = with.frame.gauges;
        let mut out = DMatrix::zeros(gauges, self.columns(gauges));
        let length = with.sampled.geometry.length;
        let start = with.block as f64 * length;
        match &self.what {
            What::Source {
                parts,
                mixed,
                middle,
                onset,
                mismatch,
            } => {
                let modal = &with.frame.modal;
                let directions = mixed.first().map_or(0, DMatrix::ncols);
                let mean = |growth: f64, onset: f64, lambda: f64| {
                    with.sampled
                        .geometry
                        .instants
                        .iter()
                        .map(|t| shape(lambda, start + t - onset, growth))
                        .sum::<f64>()
                        / with.sampled.geometry.instants.len() as f64
                };
                let mut sources = DMatrix::zeros(modal.lambda.len(), directions);
                for ((growth, onset), mixed) in parts.iter().zip(mixed) {
                    for (mode, lambda) in modal.lambda.iter().enumerate() {
                        let factor = mean(*growth, *onset, *lambda);
                        let mut row = sources.row_mut(mode);
                        row += mixed.row(mode) * factor;
                    }
                }
                out.columns_mut(0, directions)
                    .copy_from(&modal.gauges.tr_mul(&sources));
                for (at, growth) in [0.0, 15.0 * DAY].into_iter().enumerate() {
                    let source = DVector::from_fn(middle.len(), |mode, _| {
                        middle[mode] * mean(growth, *onset, modal.lambda[mode])
                    });
                    let seen = modal.gauges.tr_mul(&source);
                    for gauge in 0..gauges {
                        out[(gauge, directions + at * gauges + gauge)] = mismatch * seen[gauge];
                    }
                }
            }
            What::Gauges { each, onset, round } => {
                let mut column = 0;
                for &(gauge, step, ramp) in each {
                    if gauge < gauges {
                        out[(gauge, column)] = if with.block > *onset { step } else { 0.0 };
                        let since = (start + 0.5 * length - *onset as f64 * length).max(0.0);
                        out[(gauge, column + 1)] = ramp * since;
                    }
                    column += 2;
                    for of in (onset - round)..=(onset + round) {
                        if gauge < gauges && of == with.block {
                            out[(gauge, column)] = step;
                        }
                        column += 1;
                    }
                }
            }
            What::Meter {
                well,
                sd,
                onset,
                round,
            } => {
                let width = out.ncols();
                let modes = with.frame.modal.lambda.len();
                if memory.ncols() != width {
                    *memory = DMatrix::zeros(modes, width);
                }
                for column in 0..width {
                    let of = onset - round + i64::try_from(column).unwrap_or(0) - 1;
                    let active = if column == 0 {
                        with.block > onset + round
                    } else {
                        with.block == of
                    };
                    let entering_active = if column == 0 {
                        with.block - 1 > onset + round
                    } else {
                        with.block - 1 == of
                    };
                    let (end, add) = with.tables.drive_one(with.sampled, *well, &|_| active);
                    let means: Vec<DVector<f64>> = with
                        .tables
                        .mean_decay
                        .iter()
                        .zip(&add)
                        .map(|(decay, add)| memory.column(column).component_mul(decay) + add)
                        .collect();
                    let mut value = seen(&with.frame.base, *well, &means, &with.sampled.class);
                    let entering = with.entering.get(*well).copied().unwrap_or(0.0);
                    let held = with.sampled.held(
                        *well,
                        if entering_active { entering } else { 0.0 },
                        &|_| active,
                    );
                    for &(gauge, of, skin) in with.skins {
                        if of == *well {
                            let class = with.sampled.class.get(gauge).copied().unwrap_or(0);
                            value[gauge] += skin * held.get(class).copied().unwrap_or(0.0);
                        }
                    }
                    out.column_mut(column).axpy(*sd, &value, 0.0);
                    let mut state = memory.column_mut(column);
                    state.component_mul_assign(&with.tables.decay);
                    state += end;
                }
            }
            What::Lines { lines: chosen, sd } => {
                for (column, line) in chosen.iter().enumerate() {
                    if *line < lines.ncols() {
                        out.column_mut(column).axpy(*sd, &lines.column(*line), 0.0);
                    }
                }
            }
            What::Nothing => {}
        }
        out
    }
}

/// Directions of a source with a spread of place, onset and growth.
fn source(
    adoption: &Adoption,
    subject: Option<Subject>,
    frame: &Frame,
    places: &Places,
    sd: f64,
    mismatch: f64,
    noise: &[f64],
) -> What {
    let modal = &frame.modal;
    let mut ports = DMatrix::zeros(modal.lambda.len(), 0);
    match (subject, adoption.place) {
        (Some(Subject::Neighbour(n)), _) if n < modal.neighbours.ncols() => {
            ports = modal.neighbours.columns(n, 1).into_owned()
        }
        (_, Some(place)) => {
            let at = [place.x, place.y];
            let mut near: Vec<(f64, usize)> = places
                .all
                .iter()
                .take(places.candidates)
                .enumerate()
                .filter(|(_, (_, layer))| *layer == place.layer)
                .map(|(i, (p, _))| (distance(*p, at), i))
                .collect();
            near.sort_by(|a, b| a.0.total_cmp(&b.0));
            let reach = (1.5 * place.radius_90).max(0.15 * places.half_width);
            let mut chosen: Vec<usize> = near
                .iter()
                .filter(|(d, _)| *d <= reach)
                .map(|(_, i)| *i)
                .collect();
            if chosen.len() < 3 {
                chosen = near.iter().take(3).map(|(_, i)| *i).collect();
            }
            // Evenly thinned from near to far.
            let every = chosen.len().div_ceil(SAMPLED).max(1);
            let thinned: Vec<usize> = chosen.into_iter().step_by(every).collect();
            if thinned.iter().all(|&i| i < modal.places.ncols()) {
                ports = modal.places.select_columns(thinned.iter());
            }
        }
        _ => {}
    }
    if ports.ncols() == 0 {
        return What::Nothing;
    }
    let spread = adoption.spread();
    let mut parts = Vec::new();
    for growth in GROWTHS.into_iter().step_by(2) {
        for shift in [-1.5, -0.75, 0.0, 0.75, 1.5] {
            parts.push((growth * DAY, adoption.onset + shift * spread));
        }
    }
    let gauges = frame.gauges;
    let samples = parts.len() * ports.ncols();
    let mut table = DMatrix::zeros(LAGS.len() * gauges, samples);
    for (part, (growth, onset)) in parts.iter().enumerate() {
        for (lag, days) in LAGS.iter().enumerate() {
            let mut source = ports.clone();
            for (mode, lambda) in modal.lambda.iter().enumerate() {
                let factor = shape(*lambda, adoption.onset + days * DAY - onset, *growth);
                let mut row = source.row_mut(mode);
                row *= factor;
            }
            let mut seen = modal.gauges.tr_mul(&source);
            for gauge in 0..gauges {
                let scale = noise
                    .get(gauge)
                    .copied()
                    .unwrap_or(1.0)
                    .max(f64::MIN_POSITIVE);
                seen.row_mut(gauge).unscale_mut(scale);
            }
            table
                .view_mut(
                    (lag * gauges, part * ports.ncols()),
                    (gauges, ports.ncols()),
                )
                .copy_from(&seen);
        }
    }
    let eigen = table.tr_mul(&table).symmetric_eigen();
    let mut order: Vec<usize> = (0..samples).collect();
    order.sort_by(|&a, &b| eigen.eigenvalues[b].total_cmp(&eigen.eigenvalues[a]));
    let unit = sd / (samples as f64).sqrt();
    // A direction that never reaches a tenth of a gauge's noise says nothing.
    let kept: Vec<usize> = order
        .into_iter()
        .take(DIRECTIONS)
        .filter(|&i| eigen.eigenvalues[i].max(0.0).sqrt() * unit > 0.1)
        .collect();
    if kept.is_empty() {
        return What::Nothing;
    }
    let mixture = eigen.eigenvectors.select_columns(kept.iter()) * unit;
    let mixed = (0..parts.len())
        .map(|part| &ports * mixture.rows(part * ports.ncols(), ports.ncols()))
        .collect();
    What::Source {
        parts,
        mixed,
        middle: ports.column_mean(),
        onset: adoption.onset,
        mismatch: sd * (0.02 + 2.0 * mismatch).min(0.5),
    }
}
