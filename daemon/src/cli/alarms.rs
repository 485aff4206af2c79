//! `borewake alarms`: lists alarms, acknowledges, shelves and adopts them, through the running daemon.

use std::path::{Path, PathBuf};

use borewake_model::units::Dimension;
use clap::{Args, Subcommand};
use serde_json::json;

use super::table::{Align, Table};
use super::{Context, Exit, Failure, print};
use crate::alarm::NOTICE;
use crate::config;
use crate::control::{self, ControlError};
use crate::record::{AlarmId, AlarmState, AlarmView, Command, CommandKind, Priority, Reply, Stamp};
use crate::store::Reader;

/// Lists alarms, acknowledges, shelves and adopts them, through the running daemon
#[derive(Debug, Args)]
#[command(after_help = "\
Examples:
  borewake alarms site.toml
  borewake alarms site.toml acknowledge watch --by jm --note 'crew is on its way'
  borewake alarms site.toml shelve limit-O-2-above --for '8 h' --by jm --note 'gauge is being changed'
  borewake alarms site.toml adopt watch --occurrence 2 --by jm --note 'old well plugged, leak accepted'

To acknowledge says that somebody has seen it, not that it is mended. To adopt takes the finding into the model, so that
the watch goes on past it. To shelve, or to take out of service, holds an alarm back: it goes on being judged and recorded,
and comes back as unacknowledged if it still stands. Ends with 2 where the daemon refuses, with 3 where no daemon runs.")]
pub(super) struct Alarms {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    #[command(subcommand)]
    act: Option<Act>,
}

/// What can be done.
#[derive(Debug, Subcommand)]
enum Act {
    /// Lists alarms that are not normal, and those that lately were (this is also done where nothing is asked for)
    List,
    /// Says that an alarm was seen
    #[command(visible_alias = "ack")]
    Acknowledge(Named),
    /// Takes the finding of an alarm of the watch into the model
    Adopt(Named),
    /// Holds an alarm back for a while; it comes back by itself
    Shelve {
        #[command(flatten)]
        named: Named,
        /// For how long, such as '8 h' or '2 d'
        #[arg(long = "for", value_name = "TIME", value_parser = time)]
        span: f64,
    },
    /// Brings a shelved alarm back before its time
    Unshelve(Named),
    /// Takes an alarm out of service for maintenance, until it is put back
    TakeOut(Named),
    /// Puts an alarm back into service
    PutBack(Named),
    /// Resets a latched alarm whose condition is gone
    Reset(Named),
}

fn time(text: &str) -> Result<f64, String> {
    let seconds = Dimension::Time.parse(text).map_err(|e| e.to_string())?;
    if seconds > 0.0 {
        Ok(seconds)
    } else {
        Err("give a time above zero, such as '8 h'".to_owned())
    }
}

/// One alarm, and who asks.
#[derive(Debug, Args)]
struct Named {
    /// Name of the alarm, as `list` shows it
    #[arg(value_name = "ALARM")]
    alarm: String,
    /// Which occurrence was seen; the present one where not given
    #[arg(long, value_name = "N")]
    occurrence: Option<u32>,
    /// Who asks; the user logged in where not given
    #[arg(long, value_name = "NAME")]
    by: Option<String>,
    /// Why, in your own words
    #[arg(long, value_name = "TEXT", default_value = "")]
    note: String,
}

impl Alarms {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let folder = config::load(&self.site)?.store.folder;
        let (named, kind): (Named, Box<dyn Fn(AlarmId, u32) -> CommandKind>) =
            match self.act.unwrap_or(Act::List) {
                Act::List => return list(&folder, context),
                Act::Acknowledge(named) => (
                    named,
                    Box::new(|alarm, occurrence| CommandKind::Acknowledge { alarm, occurrence }),
                ),
                Act::Adopt(named) => (
                    named,
                    Box::new(|alarm, occurrence| CommandKind::Adopt {
                        alarm,
                        occurrence,
                        adoption: None,
                    }),
                ),
                Act::Shelve { named, span } => {
                    let until = Stamp::from_seconds(Stamp::now().seconds() + span);
                    let kind = move |alarm, occurrence| CommandKind::Shelve {
                        alarm,
                        occurrence,
                        until,
                    };
                    (named, Box::new(kind))
                }
                Act::Unshelve(named) => (
                    named,
                    Box::new(|alarm, occurrence| CommandKind::Unshelve { alarm, occurrence }),
                ),
                Act::TakeOut(named) => (
                    named,
                    Box::new(|alarm, occurrence| CommandKind::TakeOut { alarm, occurrence }),
                ),
                Act::PutBack(named) => (
                    named,
                    Box::new(|alarm, occurrence| CommandKind::PutBack { alarm, occurrence }),
                ),
                Act::Reset(named) => (
                    named,
                    Box::new(|alarm, occurrence| CommandKind::Reset { alarm, occurrence }),
                ),
            };
        let (by, note, alarm, occurrence) = named.resolve(&folder)?;
        let kind = kind(alarm, occurrence);
        act(&folder, &Command { by, note, kind }, context)
    }
}

impl Named {
    /// Who, why, which alarm and which occurrence; the present occurrence is asked of the daemon.
    fn resolve(self, folder: &Path) -> Result<(String, String, AlarmId, u32), Failure> {
        let by = self.by.filter(|by| !by.trim().is_empty()).or_else(user);
        let by = by.ok_or_else(|| {
            Failure::wrong(anyhow::anyhow!("who asks is not known; give --by NAME"))
        })?;
        let occurrence = match self.occurrence {
            Some(occurrence) => occurrence,
            None => present(folder, &self.alarm)?,
        };
        Ok((by, self.note, AlarmId(self.alarm), occurrence))
    }
}

/// The user logged in, as the environment tells.
fn user() -> Option<String> {
    ["USER", "LOGNAME"]
        .iter()
        .filter_map(|name| std::env::var(name).ok())
        .find(|user| !user.is_empty())
}

/// The present occurrence of an alarm.
fn present(folder: &Path, alarm: &str) -> Result<u32, Failure> {
    let views = ask_alarms(folder).map_err(Failure::unusable)?.1;
    let view = views.iter().find(|v| v.alarm.id.0 == alarm);
    view.map(|v| v.alarm.occurrence).ok_or_else(|| {
        let names: Vec<&str> = views.iter().map(|v| v.alarm.id.0.as_str()).collect();
        Failure::wrong(if names.is_empty() {
            anyhow::anyhow!("there is no alarm {alarm}, nor any other at present")
        } else {
            anyhow::anyhow!("there is no alarm {alarm}; there are {}", names.join(", "))
        })
    })
}

/// Asks the daemon for its alarms: when they stood so, and what they are.
fn ask_alarms(folder: &Path) -> Result<(Stamp, Vec<AlarmView>), ControlError> {
    let show = Command {
        by: user().unwrap_or_else(|| "somebody".to_owned()),
        note: String::new(),
        kind: CommandKind::Show,
    };
    match control::ask(folder, &show)? {
        Reply::State { snapshot } => Ok((snapshot.taken, snapshot.alarms)),
        Reply::Done { .. } | Reply::Refused { .. } => Err(ControlError::NoAnswer),
    }
}

fn act(folder: &Path, command: &Command, context: &Context) -> Result<Exit, Failure> {
    let reply = control::ask(folder, command).map_err(Failure::unusable)?;
    match reply {
        Reply::Done { text } => {
            print(&if context.json {
                format!("{:#}\n", json!({ "done": true, "text": text }))
            } else {
                format!("{text}\n")
            })?;
            Ok(Exit::Done)
        }
        Reply::Refused { why } => Err(Failure::wrong(anyhow::anyhow!("refused: {why}"))),
        Reply::State { .. } => Err(Failure::unusable(ControlError::NoAnswer)),
    }
}

fn list(folder: &Path, context: &Context) -> Result<Exit, Failure> {
    let (live, taken, views) = match ask_alarms(folder) {
        Ok((taken, views)) => (true, Some(taken), views),
        Err(why @ ControlError::NotRunning { .. }) => {
            let views =
                stored(folder).map_err(|e| Failure::unusable(e.context(why.to_string())))?;
            eprintln!("borewake: {why}; these are the alarms as it left them");
            (false, None, views)
        }
        Err(why) => return Err(Failure::unusable(why)),
    };
    print(&if context.json {
        let document = json!({
            "live": live,
            "taken": taken,
            "alarms": views,
            "notice": NOTICE,
        });
        format!("{document:#}\n")
    } else {
        text(&views)
    })?;
    Ok(Exit::Done)
}

/// Alarms as the last daemon stored them; normal ones are left out.
fn stored(folder: &Path) -> anyhow::Result<Vec<AlarmView>> {
    let runtime = tokio::runtime::Builder::new_current_thread()
        .enable_all()
        .build()?;
    let alarms = runtime.block_on(async {
        let reader = Reader::open(folder).await?;
        let alarms = reader.alarms().await;
        reader.close().await;
        alarms
    })?;
    Ok(alarms
        .into_iter()
        .map(|alarm| AlarmView {
            state: alarm.state(),
            alarm,
        })
        .filter(|view| view.state != AlarmState::Normal)
        .collect())
}

/// The table, most urgent first, with what to do below it.
fn text(views: &[AlarmView]) -> String {
    if views.is_empty() {
        return format!("No alarm stands, and none lately did.\n\n{NOTICE}\n");
    }
    let mut views: Vec<&AlarmView> = views.iter().collect();
    views.sort_by_key(|v| {
        let normal = v.state == AlarmState::Normal;
        (normal, std::cmp::Reverse(v.alarm.priority), &v.alarm.id)
    });
    let mut table = Table::new(&[
        ("ALARM", Align::Left),
        ("OCCURRENCE", Align::Right),
        ("STATE", Align::Left),
        ("PRIORITY", Align::Left),
        ("SINCE (UTC)", Align::Left),
        ("WHAT", Align::Left),
    ]);
    for view in &views {
        let alarm = &view.alarm;
        let since = alarm.since.to_string();
        table.row([
            alarm.id.0.clone(),
            alarm.occurrence.to_string(),
            view.state.name().to_owned(),
            priority(alarm.priority).to_owned(),
            since.get(..16).unwrap_or(&since).replace('T', " "),
            alarm.summary.clone(),
        ]);
    }
    let mut text = table.text(0);
    let mut told: Vec<&str> = Vec::new();
    for view in views.iter().filter(|v| v.state != AlarmState::Normal) {
        let response = view.alarm.response.as_str();
        if response.is_empty() || told.contains(&response) {
            continue;
        }
        if told.is_empty() {
            text += "\nWhat to do\n";
        }
        told.push(response);
        text += &format!("  {}: {response}\n", view.alarm.id);
    }
    text += &format!("\n{NOTICE}\n");
    text
}

fn priority(priority: Priority) -> &'static str {
    match priority {
        Priority::Low => "low",
        Priority::Medium => "medium",
        Priority::High => "high",
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::{Acknowledgement, Alarm, AlarmKind, Condition, Latch, Suppression};

    fn view(id: &str, priority: Priority, condition: Condition) -> AlarmView {
        let alarm = Alarm {
            id: AlarmId(id.into()),
            kind: AlarmKind::Limit,
            occurrence: 2,
            sequence: 1,
            condition,
            acknowledgement: Acknowledgement::Acknowledged,
            latch: Latch::None,
            suppression: Suppression::None,
            priority,
            since: Stamp::parse("2031-05-02T04:00:00Z").unwrap(),
            summary: format!("{id} is high"),
            response: "reduce the rate".into(),
            finding: None,
        };
        AlarmView {
            state: alarm.state(),
            alarm,
        }
    }

    #[test]
    fn the_table_puts_the_urgent_first_and_the_normal_last() {
        let views = [
            view("limit-b", Priority::High, Condition::Absent),
            view("limit-a", Priority::Low, Condition::Present),
            view("limit-long-name", Priority::High, Condition::Present),
        ];
        let told = text(&views);
        let lines: Vec<&str> = told.lines().collect();
        assert_eq!(
            lines[..6],
            [
                "ALARM            OCCURRENCE  STATE         PRIORITY  SINCE (UTC)       WHAT",
                "limit-long-name           2  acknowledged  high      2031-05-02 04:00  limit-long-name is high",
                "limit-a                   2  acknowledged  low       2031-05-02 04:00  limit-a is high",
                "limit-b                   2  normal        high      2031-05-02 04:00  limit-b is high",
                "",
                "What to do",
            ]
        );
        assert_eq!(lines[6], "  limit-long-name: reduce the rate");
        assert!(told.ends_with(&format!("{NOTICE}\n")));
        assert!(text(&[]).starts_with("No alarm stands"));
    }
}
