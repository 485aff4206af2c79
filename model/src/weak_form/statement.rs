//! The weak statement, once for all schemes.
//!
//! For every test function `w` of every layer `l`, with `p` the pressure change from rest,
//!
//! ```text
//! int w S dp/dt + int T grad w . A grad p + int (w - w') L (p - p')    (p' in the layer below)
//!   + int_barrier c [w][p] + int_edge w (T/(R n.A^-1 n)) p           ([.] the jump across a barrier)
//!   + int_stage w c (p - p_s) + int_edge w b (p - p_e)   (an edge driven by open water)
//!   = sum over wells q w(x)
//! ```
//!
//! Stages and a driven edge let pressure out like an open edge, and let in what their own pressure drives: `int w c p_s`
//! is an input like a well's rate.
//!
//! `T` and `S` are the zone's inside a zone, else the layer's. `A`, of determinant one, is the layer's anisotropy.
//! In a cut-out nothing is stored or conducted, and its ring has one pressure. The edge at distance `R` lets
//! pressure out where it is open, holds it where it is fixed, and keeps it where it is closed. Barriers and
//! the edge pass through all layers.

use std::collections::BTreeMap;
use std::f64::consts::PI;

use super::assembly::Assembly;
use super::nodes::{Nodes, Slot};
use super::space::{Local, MOST, Space};
use super::{Functional, Parameter, Rock, SparseBlock, System};
use crate::ModelError;
use crate::ground::mesh::{Driver, Mesh, distance};
use crate::ground::{EdgeKind, Ground, ISOTROPIC, Patches, Point, Tensor, Well};

/// Thickness of ground, as a share of the edge's distance, that stands between a driven edge and the water beyond: so
/// thin that the edge has the water's pressure.
const THIN: f64 = 1e-4;

/// Puts the statement into a space. Gauges and neighbours are left to the caller.
pub(super) fn assemble(
    ground: &Ground,
    mesh: &Mesh,
    space: &dyn Space,
    nodes: &Nodes,
) -> Result<System, ModelError> {
    let mut sum = Assembly::new(nodes.places.len());
    let mut edge = BTreeMap::new();
    for (l, layer) in ground.layers.iter().enumerate() {
        let tensor = layer.tensor();
        for t in 0..mesh.triangles.len() {
            let corners = mesh.corners(t);
            let Some(here) = nodes.triangle(mesh, t, l) else {
                continue;
            };
            let rock = Rock::at(ground, middle_of(&corners), l);
            let (parameter, value) = rock.storativity;
            sum.store(parameter, value, &here, &space.storage(&corners));
            let (parameter, value) = rock.transmissivity;
            sum.conduct(
                parameter,
                value,
                &here,
                &space.conduction(&corners, &tensor),
            );
            if let Some(leakance) = layer.leakance_below
                && let Some(below) = nodes.triangle(mesh, t, l + 1)
            {
                let storage = space.storage(&corners);
                sum.exchange(Parameter::Leakance(l), leakance, (&here, &below), &storage);
            }
        }
        if ground.edge.kind == EdgeKind::Driven {
            for &segment in &mesh.edge {
                let line = space.line(length(mesh, segment));
                let (_, transmissivity) = outlet(ground, mesh, segment, (l, &tensor));
                let beta = transmissivity / THIN;
                let slots = nodes.segment(segment, l);
                sum.let_out(Parameter::Fixed, beta, &slots, &line);
                let_in(&mut edge, beta, &slots, &line);
            }
        }
        for joint in &mesh.joints {
            let sides = (&nodes.segment(joint.one, l), &nodes.segment(joint.other, l));
            let conductance = ground
                .barriers
                .get(joint.barrier)
                .map_or(0.0, |b| b.conductance);
            let line = space.line(length(mesh, joint.one));
            sum.exchange(Parameter::Barrier(joint.barrier), conductance, sides, &line);
        }
        if ground.edge.kind == EdgeKind::Open {
            for &segment in &mesh.edge {
                let line = space.line(length(mesh, segment));
                let (parameter, share) = outlet(ground, mesh, segment, (l, &tensor));
                sum.let_out(parameter, share, &nodes.segment(segment, l), &line);
            }
        }
    }
    for (w, well) in ground.wells.iter().enumerate() {
        bore(ground, w, well, nodes, &mut sum);
    }
    let mut wells: Vec<Functional> = nodes
        .bores
        .iter()
        .map(|&i| Functional(vec![(i, 1.0)]))
        .collect();
    let mut drives = vec![Parameter::Fixed; wells.len()];
    for (s, stage) in ground.stages.iter().enumerate() {
        let mut port = BTreeMap::new();
        for piece in mesh.lines.iter().filter(|p| p.of == Driver::Stage(s)) {
            let line = space.line(length(mesh, piece.ends));
            let slots = nodes.segment(piece.ends, stage.layer);
            sum.let_out(Parameter::Stage(s), stage.conductance, &slots, &line);
            let_in(&mut port, stage.conductance, &slots, &line);
        }
        wells.push(Functional(port.into_iter().collect()));
        drives.push(Parameter::Stage(s));
    }
    if ground.edge.kind == EdgeKind::Driven {
        wells.push(Functional(edge.into_iter().collect()));
        drives.push(Parameter::Fixed);
    }
    let closed_components = sum.closed();
    let (mass, stiffness) = sum.finish()?;
    Ok(System {
        size: nodes.places.len(),
        mass,
        stiffness,
        wells,
        drives,
        gauges: Vec::new(),
        neighbours: Vec::new(),
        closed_components,
        nodes: nodes.places.clone(),
    })
}

/// Adds what a pressure beyond drives in: row sums of `factor` times a local matrix through which pressure leaves.
fn let_in(port: &mut BTreeMap<usize, f64>, factor: f64, slots: &[Slot; MOST], local: &Local) {
    for (slot, row) in slots.iter().zip(&local.entries).take(local.size) {
        if let Slot::Unknown(i) = *slot {
            *port.entry(i).or_insert(0.0) += factor * row.iter().take(local.size).sum::<f64>();
        }
    }
}

/// The patches' shares of storage and conduction: a triangle belongs to the patch of its centroid. A zone is no part of
/// a patch; it has parameters of its own.
pub(super) fn patches(
    ground: &Ground,
    mesh: &Mesh,
    space: &dyn Space,
    nodes: &Nodes,
    patches: &Patches,
) -> Result<(Vec<SparseBlock>, Vec<SparseBlock>), ModelError> {
    let mut sum = Assembly::new(nodes.places.len());
    for (l, layer) in ground.layers.iter().enumerate() {
        let tensor = layer.tensor();
        for t in 0..mesh.triangles.len() {
            let corners = mesh.corners(t);
            let Some(here) = nodes.triangle(mesh, t, l) else {
                continue;
            };
            let middle = middle_of(&corners);
            let rock = Rock::at(ground, middle, l);
            if rock.storativity.0 == Parameter::Storativity(l) {
                let parameter = Parameter::PatchStorativity(l, patches.storativity(middle));
                let local = space.storage(&corners);
                sum.store(parameter, rock.storativity.1, &here, &local);
            }
            if rock.transmissivity.0 == Parameter::Transmissivity(l) {
                let parameter = Parameter::PatchTransmissivity(l, patches.transmissivity(middle));
                let local = space.conduction(&corners, &tensor);
                sum.conduct(parameter, rock.transmissivity.1, &here, &local);
            }
        }
    }
    sum.finish()
}

/// Storage in the bore of a well, and the skin between bore and rings where they are apart.
fn bore(ground: &Ground, w: usize, well: &Well, nodes: &Nodes, sum: &mut Assembly) {
    let (Some(rings), Some(&bore)) = (nodes.rings.get(w), nodes.bores.get(w)) else {
        return;
    };
    let one = Local::scaled(1.0, &[[1.0]]);
    let alone = |i: usize| {
        let mut slots = [Slot::Absent; MOST];
        slots[0] = Slot::Unknown(i);
        slots
    };
    if well.storage > 0.0 {
        sum.store(Parameter::Storage(w), well.storage, &alone(bore), &one);
    }
    if well.storage <= 0.0 && rings.iter().any(|r| r.1 != bore) {
        // What the layers would store in the bore's own place: too little to be seen, but no unknown may store nothing.
        let storativity: f64 = well
            .layers()
            .map(|l| Rock::at(ground, well.at, l).storativity.1)
            .sum();
        let storage = PI * well.radius * well.radius * storativity;
        sum.store(Parameter::Fixed, storage, &alone(bore), &one);
    }
    for &(layer, ring) in rings.iter().filter(|r| r.1 != bore) {
        let (_, transmissivity) = Rock::at(ground, well.at, layer).transmissivity;
        let conductance = 2.0 * PI * transmissivity / well.skin;
        sum.exchange(
            Parameter::Skin(w),
            conductance,
            (&alone(bore), &alone(ring)),
            &one,
        );
    }
}

/// What an open edge lets out along a segment, per metre and Pascal.
///
/// An endless ground beyond is felt as a circle in the stretched plane where conduction is even: the outflow is
/// `T/R` there, and `T/(R n.A^-1 n)` here, `n` pointing from the centre.
fn outlet(
    ground: &Ground,
    mesh: &Mesh,
    [a, b]: [usize; 2],
    (layer, tensor): (usize, &Tensor),
) -> (Parameter, f64) {
    let at = |v: usize| mesh.points.get(v).copied().unwrap_or([f64::NAN; 2]);
    let (a, b, centre) = (at(a), at(b), mesh.centre);
    let out = [
        0.5 * (a[0] + b[0]) - centre[0],
        0.5 * (a[1] + b[1]) - centre[1],
    ];
    // Just inside, so that a zone that reaches beyond the edge counts.
    let inside = [centre[0] + 0.999 * out[0], centre[1] + 0.999 * out[1]];
    let (parameter, transmissivity) = Rock::at(ground, inside, layer).transmissivity;
    let [[xx, xy], [_, yy]] = *tensor;
    // The inverse of a symmetric matrix of determinant one.
    let stretched = yy * out[0] * out[0] - 2.0 * xy * out[0] * out[1] + xx * out[1] * out[1];
    let stretch = stretched / (out[0] * out[0] + out[1] * out[1]);
    (parameter, transmissivity / (ground.edge.distance * stretch))
}

fn middle_of(&[a, b, c]: &[Point; 3]) -> Point {
    [(a[0] + b[0] + c[0]) / 3.0, (a[1] + b[1] + c[1]) / 3.0]
}

fn length(mesh: &Mesh, [a, b]: [usize; 2]) -> f64 {
    match (mesh.points.get(a), mesh.points.get(b)) {
        (Some(&a), Some(&b)) => distance(a, b),
        _ => f64::NAN,
    }
}

/// Refuses numbers that the statement cannot take.
pub(super) fn check(ground: &Ground, space: &dyn Space) -> Result<(), ModelError> {
    let demand = |good: bool, what: String, value: f64, must: &'static str| {
        if good {
            Ok(())
        } else {
            Err(ModelError::Parameter { what, value, must })
        }
    };
    let positive = |x: f64| x.is_finite() && x > 0.0;
    let not_negative = |x: f64| x.is_finite() && x >= 0.0;
    let layers = ground.layers.len();
    if layers == 0 {
        return Err(ModelError::Size {
            what: "layers of the ground",
            found: 0,
            expected: 1,
        });
    }
    for (l, layer) in ground.layers.iter().enumerate() {
        let (t, s) = (layer.transmissivity, layer.storativity);
        demand(
            positive(t),
            format!("transmissivity of layer {}", layer.name),
            t,
            "it must be positive",
        )?;
        demand(
            positive(s),
            format!("storativity of layer {}", layer.name),
            s,
            "it must be positive",
        )?;
        if let Some(anisotropy) = layer.anisotropy {
            let ratio = anisotropy.ratio;
            demand(
                ratio.is_finite() && ratio >= 1.0 && anisotropy.direction.is_finite(),
                format!("anisotropy of layer {}", layer.name),
                ratio,
                "its ratio must be one or more",
            )?;
            demand(
                layer.tensor() == ISOTROPIC || space.takes(&layer.tensor()),
                format!("anisotropy of layer {}", layer.name),
                ratio,
                "this scheme cannot follow its direction; use finite elements",
            )?;
        }
        if let Some(leakance) = layer.leakance_below {
            let what = format!("leakance below layer {}", layer.name);
            demand(
                not_negative(leakance),
                what,
                leakance,
                "it must be zero or more",
            )?;
            let what = format!("leakance below layer {}", layer.name);
            demand(l + 1 < layers, what, leakance, "there is no layer below")?;
        }
    }
    for zone in &ground.zones {
        let (t, s) = (zone.transmissivity, zone.storativity);
        demand(
            positive(t),
            format!("transmissivity of zone {}", zone.name),
            t,
            "it must be positive",
        )?;
        demand(
            positive(s),
            format!("storativity of zone {}", zone.name),
            s,
            "it must be positive",
        )?;
        demand(
            zone.layer < layers,
            format!("layer of zone {}", zone.name),
            zone.layer as f64,
            "the ground has no such layer",
        )?;
    }
    for barrier in &ground.barriers {
        let what = format!("conductance of barrier {}", barrier.name);
        demand(
            not_negative(barrier.conductance),
            what,
            barrier.conductance,
            "it must be zero or more",
        )?;
    }
    for stage in &ground.stages {
        let what = format!("conductance of stage {}", stage.name);
        demand(
            positive(stage.conductance),
            what,
            stage.conductance,
            "it must be positive",
        )?;
        demand(
            stage.layer < layers,
            format!("layer of stage {}", stage.name),
            stage.layer as f64,
            "the ground has no such layer",
        )?;
    }
    let seats = (0..ground.gauges.len()).map(|g| {
        (
            format!("layer of gauge {g}"),
            ground.gauge_at(g).map(|(_, l)| l),
        )
    });
    let wells = ground.wells.iter().flat_map(|w| {
        w.layers()
            .map(|l| (format!("layer of well {}", w.name), Some(l)))
    });
    let others = ground
        .neighbours
        .iter()
        .map(|n| (format!("layer of neighbour {}", n.name), Some(n.layer)));
    for (what, layer) in seats.chain(wells).chain(others) {
        let value = layer.map_or(f64::NAN, |l| l as f64);
        demand(
            layer.is_some_and(|l| l < layers),
            what,
            value,
            "the ground has no such layer",
        )?;
    }
    for well in &ground.wells {
        let mut layers: Vec<usize> = well.layers().collect();
        layers.sort_unstable();
        if let Some(pair) = layers.windows(2).find(|p| p.first() == p.last()) {
            let layer = pair.first().map_or(f64::NAN, |l| *l as f64);
            let what = format!("layer of well {}", well.name);
            return demand(false, what, layer, "each layer may be named once");
        }
        demand(
            well.trace.is_empty() || well.skin >= 0.0,
            format!("skin of well {}", well.name),
            well.skin,
            "a well with a trace takes none below zero: its length says how well it is joined to the ground",
        )?;
        let what = format!("storage of well {}", well.name);
        demand(
            not_negative(well.storage),
            what,
            well.storage,
            "it must be zero or more",
        )?;
    }
    Ok(())
}
