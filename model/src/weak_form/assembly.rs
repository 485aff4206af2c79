//! Gathers local matrices into sparse blocks, one per parameter, and keeps account of what is connected.

use std::collections::BTreeMap;

use faer::sparse::{SparseColMat, Triplet};

use super::nodes::Slot;
use super::space::{Local, MOST};
use super::{Parameter, SparseBlock};
use crate::ModelError;

type Entries = BTreeMap<Parameter, Vec<(usize, usize, f64)>>;

/// The matrices as they grow.
pub(super) struct Assembly {
    size: usize,
    mass: Entries,
    stiffness: Entries,
    /// Union-find over unknowns that conduction joins.
    parent: Vec<usize>,
    /// Unknowns from which pressure leaves through the edge.
    leaks: Vec<bool>,
}

impl Assembly {
    pub(super) fn new(size: usize) -> Self {
        Self {
            size,
            mass: Entries::new(),
            stiffness: Entries::new(),
            parent: (0..size).collect(),
            leaks: vec![false; size],
        }
    }

    /// Adds `factor` times a local matrix to storage.
    pub(super) fn store(
        &mut self,
        parameter: Parameter,
        factor: f64,
        slots: &[Slot; MOST],
        local: &Local,
    ) {
        let list = self.mass.entry(parameter).or_default();
        add(list, factor, slots, slots, local);
    }

    /// Adds `factor` times a local matrix, whose rows sum to zero, to conduction.
    pub(super) fn conduct(
        &mut self,
        parameter: Parameter,
        factor: f64,
        slots: &[Slot; MOST],
        local: &Local,
    ) {
        if factor == 0.0 {
            return;
        }
        let list = self.stiffness.entry(parameter).or_default();
        add(list, factor, slots, slots, local);
        self.join(slots.iter().take(local.size).copied());
    }

    /// Adds `factor` times a local matrix through which pressure leaves the ground.
    pub(super) fn let_out(
        &mut self,
        parameter: Parameter,
        factor: f64,
        slots: &[Slot; MOST],
        local: &Local,
    ) {
        if factor == 0.0 {
            return;
        }
        let list = self.stiffness.entry(parameter).or_default();
        add(list, factor, slots, slots, local);
        let out = slots.iter().take(local.size).copied();
        self.join(out.chain([Slot::Held]));
    }

    /// Adds `factor` times a local matrix acting on the difference between two sets of nodes.
    pub(super) fn exchange(
        &mut self,
        parameter: Parameter,
        factor: f64,
        (one, other): (&[Slot; MOST], &[Slot; MOST]),
        local: &Local,
    ) {
        if factor == 0.0 {
            return;
        }
        let list = self.stiffness.entry(parameter).or_default();
        add(list, factor, one, one, local);
        add(list, factor, other, other, local);
        add(list, -factor, one, other, local);
        add(list, -factor, other, one, local);
        let all = one
            .iter()
            .take(local.size)
            .chain(other.iter().take(local.size));
        self.join(all.copied());
    }

    fn root(&mut self, mut i: usize) -> usize {
        while let Some(&up) = self.parent.get(i) {
            if up == i {
                break;
            }
            let over = self.parent.get(up).copied().unwrap_or(up);
            if let Some(slot) = self.parent.get_mut(i) {
                *slot = over;
            }
            i = over;
        }
        i
    }

    fn join(&mut self, slots: impl Iterator<Item = Slot>) {
        let (mut first, mut held) = (None, false);
        for slot in slots {
            match slot {
                Slot::Held => held = true,
                Slot::Absent => {}
                Slot::Unknown(i) => {
                    let to = self.root(*first.get_or_insert(i));
                    let from = self.root(i);
                    // The lower number leads, so that groups come out in order.
                    let (low, high) = (to.min(from), to.max(from));
                    if let Some(slot) = self.parent.get_mut(high) {
                        *slot = low;
                    }
                }
            }
        }
        if held && let Some(slot) = first.and_then(|i| self.leaks.get_mut(i)) {
            *slot = true;
        }
    }

    /// Groups of unknowns from which nothing leaves, in ascending order.
    pub(super) fn closed(&mut self) -> Vec<Vec<usize>> {
        let mut groups: BTreeMap<usize, (Vec<usize>, bool)> = BTreeMap::new();
        for i in 0..self.size {
            let root = self.root(i);
            let leaks = self.leaks.get(i).copied().unwrap_or(false);
            let group = groups.entry(root).or_default();
            group.0.push(i);
            group.1 |= leaks;
        }
        groups
            .into_values()
            .filter(|(_, leaks)| !leaks)
            .map(|(group, _)| group)
            .collect()
    }

    /// The blocks of storage and conduction.
    pub(super) fn finish(self) -> Result<(Vec<SparseBlock>, Vec<SparseBlock>), ModelError> {
        Ok((
            blocks(self.size, self.mass)?,
            blocks(self.size, self.stiffness)?,
        ))
    }
}

fn add(
    list: &mut Vec<(usize, usize, f64)>,
    factor: f64,
    rows: &[Slot; MOST],
    columns: &[Slot; MOST],
    local: &Local,
) {
    for (row, entries) in rows.iter().zip(&local.entries).take(local.size) {
        let Slot::Unknown(i) = *row else { continue };
        for (column, value) in columns.iter().zip(entries).take(local.size) {
            if let Slot::Unknown(j) = *column
                && *value != 0.0
            {
                list.push((i, j, factor * value));
            }
        }
    }
}

fn blocks(size: usize, entries: Entries) -> Result<Vec<SparseBlock>, ModelError> {
    entries
        .into_iter()
        .map(|(parameter, mut list)| {
            // A stable sort and sums in order: both triangles get the same bits, and so does every run.
            list.sort_by_key(|&(i, j, _)| (j, i));
            let mut unique: Vec<Triplet<usize, usize, f64>> = Vec::with_capacity(list.len() / 2);
            for (i, j, value) in list {
                match unique.last_mut() {
                    Some(last) if last.row == i && last.col == j => last.val += value,
                    _ => unique.push(Triplet::new(i, j, value)),
                }
            }
            let matrix =
                SparseColMat::try_new_from_triplets(size, size, &unique).map_err(|_| {
                    ModelError::Size {
                        what: "entries of a sparse matrix",
                        found: unique.len(),
                        expected: size,
                    }
                })?;
            Ok(SparseBlock { parameter, matrix })
        })
        .collect()
}
