//! `[[stage]]`: lines along which the ground meets open water.

use borewake_model::ground::Stage;
use borewake_model::units::Dimension;

use super::super::section::{At, Section};
use super::super::values::Sign;
use super::ground::layer;
use super::layer::LayerRead;
use super::points::{sound_name, unique};

/// A stage as written.
pub(super) struct StageRead {
    pub(super) stage: Stage,
    pub(super) path: String,
    /// Channel of its level or pressure.
    pub(super) channel: At<String>,
}

/// Reads every `[[stage]]`.
pub(super) fn stages(root: &mut Section<'_>, layers: &[LayerRead]) -> Vec<StageRead> {
    let mut names = Vec::new();
    let mut stages = Vec::new();
    for mut section in root.list("stage") {
        let name = sound_name(&mut section);
        if let Some(name) = name.clone() {
            unique(&section, "stage", &mut names, name);
        }
        let line = section.must(
            "line",
            "line = [[\"0 m\", \"0 m\"], [\"1 km\", \"2 km\"]], the water's edge or course",
            |s, k| s.line(k),
        );
        let layer = layer(&mut section, layers);
        let conductance = section.must(
            "conductance",
            "conductance = \"1e-9 m3/(Pa s m)\", of its bed per metre of line",
            |s, k| s.quantity(k, Dimension::Conductance, Sign::Positive),
        );
        let channel = section.must(
            "channel",
            "channel = \"…\", the channel of its level or pressure",
            |s, k| s.text(k),
        );
        let channel = channel.unwrap_or_else(|| At {
            value: String::new(),
            span: section.span.clone(),
        });
        stages.push(StageRead {
            stage: Stage {
                name: name.map(|n| n.value).unwrap_or_default(),
                line: line.map(|l| l.value).unwrap_or_default(),
                layer,
                conductance: conductance.map_or(1.0, |c| c.value),
            },
            path: section.path().to_owned(),
            channel,
        });
        section.close();
    }
    stages
}
