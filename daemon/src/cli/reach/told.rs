//! Reach told to people, to programs and as a map.

use std::fmt::Write as _;
use std::path::PathBuf;

use borewake_model::ground::Point;
use borewake_model::units::{Dimension, significant};
use borewake_model::watch::Reach;
use serde_json::{Value, json};

use crate::alarm::NOTICE;
use crate::cli::table::{Align, Table};
use crate::config::Site;
use crate::report::plan::Mark;
use crate::report::reach_map::{LayerReach, ReachMap, draw};

/// What a further gauge would gain.
pub(super) struct Added {
    /// Where it was asked for.
    pub(super) wanted: Point,
    /// Where it was put.
    pub(super) at: Point,
    pub(super) layer: usize,
    pub(super) noise: f64,
    /// Reach after its time of learning, without it and with it.
    pub(super) without: Reach,
    pub(super) with: Reach,
}

/// What is told.
pub(super) struct Told<'a> {
    pub(super) site: &'a Site,
    pub(super) notes: Vec<String>,
    pub(super) reach: &'a Reach,
    pub(super) added: Option<&'a Added>,
    /// Delay of the map \[s\].
    pub(super) after: f64,
}

/// Best, median and worst size within the outline by one delay; a place where nothing is seen counts as worst.
pub(super) fn within_outline(reach: &Reach, delay: usize) -> Option<[f64; 3]> {
    let mut sizes: Vec<f64> = reach
        .places
        .iter()
        .filter(|p| p.inside)
        .filter_map(|p| Some(p.smallest.get(delay)?.unwrap_or(f64::INFINITY)))
        .collect();
    sizes.sort_by(f64::total_cmp);
    Some([
        *sizes.first()?,
        *sizes.get(sizes.len() / 2)?,
        *sizes.last()?,
    ])
}

/// A size as it is told; a place where nothing is seen has none.
pub(super) fn size(size: Option<f64>, show: impl FnOnce(f64) -> String) -> String {
    let seen = size.filter(|s| s.is_finite());
    seen.map_or_else(|| "unseen".to_owned(), show)
}

impl Told<'_> {
    fn number(&self, size: Option<f64>) -> String {
        let units = self.site.units;
        self::size(size, |v| significant(units.number(Dimension::Rate, v), 3))
    }

    fn named(&self) -> Vec<(String, Point, usize)> {
        let ground = &self.site.ground;
        let wells = ground
            .wells
            .iter()
            .map(|w| (format!("by well {}", w.name), w.at, w.layer));
        let gauges = ground.gauges.iter().enumerate().filter_map(|(index, g)| {
            let (at, layer) = ground.gauge_at(index)?;
            let own = ground.wells.iter().any(|w| w.at == at);
            (!own).then(|| (format!("by gauge {}", g.name), at, layer))
        });
        wells.chain(gauges).collect()
    }

    fn table(&self, reach: &Reach) -> Table {
        let heads: Vec<String> = reach
            .delays
            .iter()
            .map(|d| self.site.units.show(Dimension::Time, d.after))
            .collect();
        let mut columns = vec![("place", Align::Left)];
        columns.extend(heads.iter().map(|h| (h.as_str(), Align::Right)));
        let mut table = Table::new(&columns);
        for (row, name) in ["best place", "median place", "worst place"]
            .iter()
            .enumerate()
        {
            let mut cells = vec![format!("{name} within the outline")];
            cells.extend((0..reach.delays.len()).map(|delay| {
                self.number(within_outline(reach, delay).and_then(|w| w.get(row).copied()))
            }));
            table.row(cells);
        }
        let mut named = self.named();
        if let Some(added) = self.added {
            named.push(("by the added gauge".to_owned(), added.at, added.layer));
        }
        for (name, at, layer) in named {
            let Some(place) = reach.nearest(at, layer).and_then(|i| reach.places.get(i)) else {
                continue;
            };
            let mut cells = vec![name];
            cells.extend(place.smallest.iter().map(|s| self.number(*s)));
            table.row(cells);
        }
        table
    }

    /// For people.
    pub(super) fn text(&self, files: &[&Option<PathBuf>]) -> String {
        let units = self.site.units;
        let unit = units.unit(Dimension::Rate);
        let mut text = format!(
            "site       {} ({})\n\nSmallest leak noticed with 90 % probability, in {unit}, by time since it began\n",
            self.site.name, self.site.id
        );
        text += &self.table(self.reach).text(0);
        if let Some(added) = self.added {
            let [x, y] = added.at.map(|v| units.show(Dimension::Length, v));
            let _ = writeln!(
                text,
                "\nA gauge with noise of {} at {x}, {y}, {} from where it was asked for: the model has a port there.\n\
                 Both tables are those after 30 d of learning. Without it, in {unit}:",
                units.show(Dimension::Pressure, added.noise),
                units.show(
                    Dimension::Length,
                    (added.at[0] - added.wanted[0]).hypot(added.at[1] - added.wanted[1])
                ),
            );
            text += &self.table(&added.without).text(0);
            let _ = writeln!(text, "\nWith it:");
            text += &self.table(&added.with).text(0);
        }
        for note in &self.notes {
            let _ = write!(text, "\nnote: {note}");
        }
        let _ = write!(
            text,
            "\nnote: A constant leak, by its outflow. Sooner than the watch judges, nothing is noticed; such delays are left out.\n"
        );
        for path in files.iter().filter_map(|f| f.as_ref()) {
            let _ = write!(text, "\nwritten    {}", path.display());
        }
        let _ = writeln!(text, "\n\n{NOTICE}");
        text
    }

    /// For spreadsheets: a row a place.
    pub(super) fn sheet(&self) -> String {
        let units = self.site.units;
        let (l, q) = (units.unit(Dimension::Length), units.unit(Dimension::Rate));
        let mut sheet = format!("east [{l}],north [{l}],layer,within_outline");
        for delay in &self.reach.delays {
            let _ = write!(
                sheet,
                ",after {} [{q}]",
                units.show(Dimension::Time, delay.after)
            );
        }
        sheet.push('\n');
        for place in &self.reach.places {
            let [x, y] = place.at.map(|v| units.number(Dimension::Length, v));
            let layer = self.site.ground.layers.get(place.layer);
            let layer = layer.map_or("", |l| l.name.as_str()).replace('"', "\"\"");
            let _ = write!(sheet, "{x:.1},{y:.1},\"{layer}\",{}", place.inside);
            for size in &place.smallest {
                let size = size.map(|s| significant(units.number(Dimension::Rate, s), 4));
                let _ = write!(sheet, ",{}", size.unwrap_or_default());
            }
            sheet.push('\n');
        }
        sheet
    }

    /// For programs, in SI.
    pub(super) fn json(&self) -> String {
        let one = |reach: &Reach| -> Value {
            let outline: Vec<Value> = (0..reach.delays.len())
                .filter_map(|delay| within_outline(reach, delay))
                .map(|[best, median, worst]| json!({ "best": best, "median": median, "worst": worst }))
                .collect();
            json!({
                "after_s": reach.delays.iter().map(|d| d.after).collect::<Vec<_>>(),
                "within_outline_m3_s": outline,
                "places": reach.places.iter().map(|p| json!({
                    "x": p.at[0], "y": p.at[1], "layer": p.layer, "inside": p.inside, "smallest_m3_s": p.smallest,
                })).collect::<Vec<_>>(),
            })
        };
        let added = self.added.map(|a| {
            json!({ "at": a.at, "layer": a.layer, "noise_pa": a.noise, "without": one(&a.without), "with": one(&a.with) })
        });
        let document = json!({
            "site": self.site.id, "probability": 0.9, "reach": one(self.reach), "added": added,
            "notes": self.notes, "notice": NOTICE,
        });
        format!("{document:#}\n")
    }

    /// As a map: of the reach with the further gauge where one is asked about.
    pub(super) fn picture(&self) -> String {
        let reach = self.added.map_or(self.reach, |a| &a.with);
        let delay = reach
            .delays
            .iter()
            .enumerate()
            .min_by(|a, b| {
                let off = |d: f64| (d - self.after).abs();
                off(a.1.after).total_cmp(&off(b.1.after))
            })
            .map_or(0, |(index, _)| index);
        let after = reach.delays.get(delay).map_or(self.after, |d| d.after);
        let ground = &self.site.ground;
        let layers = ground.layers.iter().enumerate();
        let layers = layers
            .map(|(index, layer)| LayerReach {
                name: layer.name.clone(),
                places: reach
                    .places
                    .iter()
                    .filter(|p| p.layer == index)
                    .map(|p| (p.at, p.smallest.get(delay).copied().flatten()))
                    .collect(),
            })
            .collect();
        let mut marks = Vec::new();
        for well in &ground.wells {
            marks.push((Mark::Well, well.name.clone(), well.at, None));
        }
        for (index, gauge) in ground.gauges.iter().enumerate() {
            if let Some((at, layer)) = ground.gauge_at(index) {
                // One that sits in a well is named by it.
                let own = ground
                    .wells
                    .iter()
                    .any(|w| w.at == at && w.name == gauge.name);
                let name = if own {
                    String::new()
                } else {
                    gauge.name.clone()
                };
                marks.push((Mark::Gauge, name, at, Some(layer)));
            }
        }
        for neighbour in &ground.neighbours {
            let layer = Some(neighbour.layer);
            marks.push((Mark::Neighbour, neighbour.name.clone(), neighbour.at, layer));
        }
        let away = |at: Point| (at[0] - reach.centre[0]).hypot(at[1] - reach.centre[1]);
        let radius = reach.places.iter().map(|p| away(p.at)).fold(0.0, f64::max);
        draw(&ReachMap {
            title: format!("Reach of {}", self.site.name),
            after: self.site.units.show(Dimension::Time, after),
            units: self.site.units,
            centre: reach.centre,
            radius: radius.min(1.5 * reach.half_width).max(1.0),
            half_width: reach.half_width,
            layers,
            barriers: ground.barriers.iter().map(|b| b.line.clone()).collect(),
            marks,
            added: self.added.map(|a| (a.at, a.layer)),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::size;

    #[test]
    fn a_place_that_nothing_sees_has_no_size() {
        let show = |v: f64| v.to_string();
        assert_eq!(size(Some(2.0), show), "2");
        assert_eq!(size(Some(f64::INFINITY), show), "unseen");
        assert_eq!(size(None, show), "unseen");
    }
}
