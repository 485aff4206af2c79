//! `borewake new`: a commented site file to begin with.

use std::fs::OpenOptions;
use std::io::{ErrorKind, Write as _};
use std::path::{Path, PathBuf};

use anyhow::Context as _;
use clap::{Args, ValueEnum};

use super::{Context, Exit, Failure, print};

/// What stands for the site's id in the files.
const ID: &str = "SITE_ID";

/// Writes a commented site file to begin with
#[derive(Debug, Args)]
#[command(after_help = "\
Examples:
  borewake new site.toml
  borewake new pit.toml --kind dewatering

The file passes `borewake check` as it is; its numbers are invented and marked. An existing file is never touched.")]
pub(super) struct New {
    /// The site file to write
    #[arg(value_name = "SITE")]
    site: PathBuf,
    /// What kind of site it is
    #[arg(long, value_enum, default_value_t = Kind::Wells)]
    kind: Kind,
}

/// The kinds there are.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
enum Kind {
    /// Injection, storage or disposal wells with gauges in and between them
    Wells,
    /// Pumped wells round a pit, with piezometers
    Dewatering,
    /// An embankment dam with piezometers
    Embankment,
}

impl Kind {
    fn text(self) -> &'static str {
        match self {
            Self::Wells => include_str!("wells.toml"),
            Self::Dewatering => include_str!("dewatering.toml"),
            Self::Embankment => include_str!("embankment.toml"),
        }
    }
}

impl New {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let shown = self.site.display().to_string();
        let text = self.kind.text().replace(ID, &id(&self.site));
        let made = OpenOptions::new()
            .write(true)
            .create_new(true)
            .open(&self.site);
        let mut file = match made {
            Ok(file) => file,
            Err(why) if why.kind() == ErrorKind::AlreadyExists => {
                return Err(Failure::wrong(anyhow::anyhow!(
                    "{shown} is there already and stays as it is; give another name"
                )));
            }
            Err(why) => return Err(Failure::wrong(anyhow::Error::new(why).context(shown))),
        };
        file.write_all(text.as_bytes())
            .and_then(|()| file.sync_all())
            .with_context(|| shown.clone())
            .map_err(Failure::unusable)?;
        print(&if context.json {
            format!("{:#}\n", serde_json::json!({ "written": self.site }))
        } else {
            format!(
                "{shown}\n\nEvery number in it is invented. Put your own in its place (lines marked FILL IN), then:\n  \
                 borewake check {shown}\n  borewake check {shown} --sources\n  borewake run {shown}\n"
            )
        })?;
        Ok(Exit::Done)
    }
}

/// An id from the file's name, or from its folder's where it is just called `site.toml`.
fn id(path: &Path) -> String {
    let of = |name: Option<&std::ffi::OsStr>| {
        let name = name?.to_str()?.to_lowercase();
        let mut id = String::new();
        for c in name.chars() {
            match c {
                'a'..='z' | '0'..='9' => id.push(c),
                _ if !id.is_empty() && !id.ends_with('-') => id.push('-'),
                _ => {}
            }
        }
        let id = id.trim_end_matches('-').to_owned();
        (!id.is_empty() && id != "site").then_some(id)
    };
    of(path.file_stem())
        .or_else(|| of(path.parent().and_then(Path::file_name)))
        .unwrap_or_else(|| "my-site".to_owned())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config;

    #[test]
    fn every_kind_holds_as_written_and_says_what_to_fill_in() {
        let folder = tempfile::tempdir().unwrap();
        for kind in Kind::value_variants() {
            let path = folder.path().join(format!("{kind:?}.toml"));
            let verb = || New {
                site: path.clone(),
                kind: *kind,
            };
            let context = Context { json: true };
            assert_eq!(verb().run(&context).unwrap(), Exit::Done);
            let site = config::load(&path).unwrap_or_else(|why| panic!("{kind:?}: {why}"));
            assert_eq!(site.id, format!("{kind:?}").to_lowercase());
            let text = std::fs::read_to_string(&path).unwrap();
            assert!(text.contains("INVENTED") && text.contains("FILL IN") && !text.contains(ID));
            assert!(
                site.limits.is_empty(),
                "no number that nobody has put there"
            );
            // A second time it is refused, and nothing is lost.
            let again = verb().run(&context).unwrap_err();
            assert_eq!(again.exit(), Exit::Wrong);
            assert_eq!(std::fs::read_to_string(&path).unwrap(), text);
        }
    }

    #[test]
    fn the_id_comes_from_the_name() {
        for (path, expected) in [
            ("Sorrel Flat.toml", "sorrel-flat"),
            ("north pit/site.toml", "north-pit"),
            ("site.toml", "my-site"),
            ("/x/--.toml", "x"),
        ] {
            assert_eq!(id(Path::new(path)), expected);
        }
    }
}
