//! `borewake check`: reads the site file and explains every mistake.

use std::path::PathBuf;
use std::time::Duration;

use borewake_model::ground::Ground;
use borewake_model::ground::mesh::{Mesh, MeshOptions, Quality};
use borewake_model::reduce::{Certificate, Spread, spread};
use borewake_model::units::Dimension;
use borewake_model::{ModelError, lagged};
use clap::Args;
use serde_json::{Value, json};

use super::commission::diffusivities;
use super::summary::{summary_json, summary_text};
use super::{Context, Exit, Failure, GroundSummary, print};
use crate::config::{self, ConfigError, Mistake, Note, Site};
use crate::intake::probe::{SourceProbe, probe};
use crate::watch::ground_file::{GroundFile, Model};

mod mesh;
mod sources;

/// Reads the site file and explains every mistake with line, value and mend
#[derive(Debug, Args)]
#[command(after_help = "\
Example:
  borewake check site.toml
  borewake check site.toml --sources     (stop `borewake run` first: a serial port has one reader)

Ends with 0 where the file holds, with 1 where it has mistakes, with 2 where it cannot be read.")]
pub(super) struct Check {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,

    /// Talks to every source and prints what it decodes; registers in all four orders of bytes
    #[arg(long)]
    sources: bool,

    /// How long a source that speaks by itself is listened to, in seconds
    #[arg(
        long,
        value_name = "SECONDS",
        default_value_t = 10.0,
        requires = "sources"
    )]
    wait: f64,
}

impl Check {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        match config::load(&self.site) {
            Ok(site) if self.sources => talk(&site, self.wait, context),
            Ok(site) if site.embankment.is_some() => {
                print(&held(&site, None, &ground_summary(&site), context.json))?;
                Ok(Exit::Done)
            }
            Ok(site) => match meshed(&site.ground) {
                Ok((quality, spread)) => {
                    let mesh = mesh::summary(&site, &quality, &spread);
                    print(&held(
                        &site,
                        Some(&mesh),
                        &ground_summary(&site),
                        context.json,
                    ))?;
                    Ok(Exit::Done)
                }
                Err(why) => {
                    print(&mesh::refused(&site, &why, context.json))?;
                    Ok(Exit::DoesNotHold)
                }
            },
            Err(ConfigError::Wrong { path, mistakes }) => {
                let text = if context.json {
                    document(&wrong_json(&path.display().to_string(), &mistakes))
                } else {
                    format!("{}\n", ConfigError::Wrong { path, mistakes })
                };
                print(&text)?;
                Ok(Exit::DoesNotHold)
            }
            Err(unreadable) => Err(unreadable.into()),
        }
    }
}

/// What the mesh of a ground is like, and how far discretisation moves what the model says.
fn meshed(ground: &Ground) -> Result<(Quality, Spread), ModelError> {
    let options = MeshOptions::default();
    let quality = Mesh::fit(ground, &options)?.quality();
    Ok((quality, spread(ground, &options)?))
}

/// Talks to the sources of a site file that holds.
fn talk(site: &Site, wait: f64, context: &Context) -> Result<Exit, Failure> {
    let wait = Duration::try_from_secs_f64(wait).map_err(|_| {
        Failure::wrong(anyhow::anyhow!(
            "--wait takes a time in seconds, such as 10"
        ))
    })?;
    let runtime = tokio::runtime::Builder::new_current_thread()
        .enable_all()
        .build()
        .map_err(Failure::unusable)?;
    let probes = runtime.block_on(probe(site, wait));
    print(&if context.json {
        document(&sources::json(site, &probes))
    } else {
        sources::text(site, &probes)
    })?;
    Ok(if probes.iter().all(SourceProbe::holds) {
        Exit::Done
    } else {
        Exit::DoesNotHold
    })
}

/// Size and certificate of the ground file, or why there is none to use.
fn ground_summary(site: &Site) -> GroundSummary {
    let file = match GroundFile::read(&site.store.folder, &site.ground_digest()) {
        Ok(file) => file,
        Err(why) => {
            let mend = site.commission_command();
            return GroundSummary {
                text: format!("  {why}; until `{mend}` has made it, every gauge is blind\n"),
                json: json!({ "usable": false, "why": why.to_string(), "mend": mend }),
            };
        }
    };
    let ground = match &file.commissioned {
        Model::Ground(ground) => ground,
        Model::Embankment(embankment) => return answers(&file, embankment),
    };
    let certificate = &ground.reduced.certificate;
    let (fastest, slowest) = certificate.times;
    let time = |t| site.units.show(Dimension::Time, t);
    let errors = |c: &Certificate| {
        format!(
            "{:.1e} at wells and gauges, {:.1e} at nodes drawn at random, {:.1e} of a leak there",
            c.ports, c.random_nodes, c.leaks
        )
    };
    let mut text = format!(
        "  {} unknowns reduced to {} modes, made {}\n  worst step response from {} to {}, as a share of its peak\n    as described: {}\n",
        certificate.full_size,
        certificate.modes,
        file.made,
        time(fastest),
        time(slowest),
        errors(certificate),
    );
    if let Some(worst) = certificate.box_corners {
        text += &format!("    over the prior's range: {worst:.1e}\n");
    }
    if let Some(numerics) = &ground.numerics {
        text += &format!(
            "    as fitted: {}\n  the watch leaves {:.1e} of every response to the numbers (with the mesh's own {:.1e}), so that no alarm is tighter\n",
            errors(&numerics.fitted),
            numerics.pair(),
            numerics.spread.sizes,
        );
    }
    GroundSummary {
        text,
        json: json!({
            "usable": true,
            "made": file.made,
            "certificate": certificate,
            "numerics": ground.numerics,
        }),
    }
}

/// What an embankment's ground file holds.
fn answers(file: &GroundFile, embankment: &lagged::Commissioned) -> GroundSummary {
    let count = embankment.calibration.answers.len();
    GroundSummary {
        text: format!(
            "  lagged answers of {count} piezometers, made {}\n",
            file.made
        ),
        json: json!({ "usable": true, "made": file.made, "answers": embankment.calibration.answers }),
    }
}

/// What is said of a site file that holds, with its mesh where it has one, and the model's size and certificate where there is a ground file.
fn held(site: &Site, mesh: Option<&GroundSummary>, ground: &GroundSummary, json: bool) -> String {
    let notes = notes(site);
    if json {
        return document(&json!({
            "holds": true,
            "file": site.path.display().to_string(),
            "mistakes": [],
            "notes": notes,
            "site": summary_json(site),
            "mesh": mesh.map(|m| &m.json),
            "model": ground.json,
        }));
    }
    let mut text = summary_text(site);
    if let Some(mesh) = mesh {
        text += &format!("\nMesh\n{}", mesh.text);
    }
    text += &format!("\nModel\n{}", ground.text);
    if !notes.is_empty() {
        text += "\nTo know\n";
        for note in &notes {
            let at = if note.line > 0 {
                format!("line {}: ", note.line)
            } else {
                String::new()
            };
            text += &format!("  {at}{}: {}\n", note.key, note.text);
        }
    }
    text += &format!("\n{} holds.\n", site.path.display());
    text
}

/// Notes of the file, and what only the machine it is checked on can tell.
fn notes(site: &Site) -> Vec<Note> {
    let mut notes = site.notes.clone();
    let here = |key: &str, text: String| Note {
        line: 0,
        column: 0,
        key: key.to_owned(),
        text,
    };
    let described = site.embankment.is_none();
    for doubt in described
        .then(|| diffusivities(site, &Vec::new()))
        .into_iter()
        .flatten()
    {
        notes.push(here("layer", doubt));
    }
    for secret in site.secrets() {
        if let Err(wrong) = secret.read() {
            notes.push(here(
                "password_file",
                format!("{wrong}; `run` will not start without it"),
            ));
        } else if secret.open_to_others() {
            let path = secret.path().display();
            let text = format!("others may read {path}; mend: chmod 600 {path}");
            notes.push(here("password_file", text));
        }
    }
    notes
}

fn wrong_json(path: &str, mistakes: &[Mistake]) -> Value {
    json!({ "holds": false, "file": path, "mistakes": mistakes, "notes": [] })
}

/// One JSON document as text.
fn document(value: &Value) -> String {
    format!("{value:#}\n")
}
