//! `borewake token`: makes, lists and revokes tokens for the page and its data.

use std::path::PathBuf;

use clap::{Args, Subcommand};
use serde_json::json;

use super::table::{Align, Table};
use super::{Context, Exit, Failure, print};
use crate::config;
use crate::control::tokens::{Scope, TokenError, Tokens};
use crate::record::Stamp;

/// Makes, lists and revokes tokens for the page and its data
#[derive(Debug, Args)]
#[command(after_help = "\
Examples:
  borewake token site.toml make 'jm phone' --scope operate
  borewake token site.toml make 'control room wall' --scope read --days 365
  borewake token site.toml revoke 'jm phone'

Every change over HTTP needs a token, and every read does that does not come from this machine. The name of the token
stands in the journal beside everything done with it: give each person a token of their own. The running daemon takes up
a change at once.")]
pub(super) struct TokenVerb {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    #[command(subcommand)]
    act: Option<Act>,
}

/// What can be done.
#[derive(Debug, Subcommand)]
enum Act {
    /// Lists tokens, never their text (this is also done where nothing is asked for)
    List,
    /// Makes a token and prints it, this once
    Make {
        /// Whose it is
        #[arg(value_name = "NAME")]
        name: String,
        /// What it allows: read to look; operate to acknowledge and shelve, too; admin to adopt and take out of service, too
        #[arg(long, value_enum, default_value_t = Scope::Read)]
        scope: Scope,
        /// Days until it ends by itself; never where not given
        #[arg(long, value_name = "DAYS", value_parser = clap::value_parser!(u32).range(1..=3660))]
        days: Option<u32>,
    },
    /// Revokes a token
    Revoke {
        /// Whose it is
        #[arg(value_name = "NAME")]
        name: String,
    },
}

impl TokenVerb {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let folder = config::load(&self.site)?.store.folder;
        let mut tokens = Tokens::read(&folder).map_err(Failure::unusable)?;
        match self.act.unwrap_or(Act::List) {
            Act::List => print(&list(&tokens, context))?,
            Act::Make { name, scope, days } => {
                let now = Stamp::now();
                let day = 86_400 * Stamp::SECOND;
                let until = days.map(|days| now.plus(i64::from(days).saturating_mul(day)));
                let text = tokens.make(&name, scope, now, until).map_err(wrong)?;
                tokens.write(&folder).map_err(Failure::unusable)?;
                print(&if context.json {
                    let made =
                        json!({ "name": name, "scope": scope, "until": until, "token": text });
                    format!("{made:#}\n")
                } else {
                    format!(
                        "{text}\n\nKeep it: it is not shown again. It allows {name} to {}.\n",
                        allows(scope)
                    )
                })?;
            }
            Act::Revoke { name } => {
                tokens.revoke(&name).map_err(wrong)?;
                tokens.write(&folder).map_err(Failure::unusable)?;
                print(&if context.json {
                    format!("{:#}\n", json!({ "revoked": name }))
                } else {
                    format!("The token {name} is revoked.\n")
                })?;
            }
        }
        Ok(Exit::Done)
    }
}

fn wrong(why: TokenError) -> Failure {
    Failure::wrong(anyhow::Error::new(why))
}

fn allows(scope: Scope) -> &'static str {
    match scope {
        Scope::Read => "look",
        Scope::Operate => "look, acknowledge and shelve",
        Scope::Admin => "look, acknowledge, shelve, adopt and take out of service",
    }
}

fn list(tokens: &Tokens, context: &Context) -> String {
    if context.json {
        let all: Vec<_> = tokens
            .all()
            .iter()
            .map(|t| json!({ "name": t.name, "scope": t.scope, "made": t.made, "until": t.until }))
            .collect();
        return format!("{:#}\n", json!({ "tokens": all }));
    }
    if tokens.all().is_empty() {
        return "There is no token yet: nothing can be changed over HTTP, and nothing read from another machine.\n".to_owned();
    }
    let columns = [
        ("NAME", Align::Left),
        ("SCOPE", Align::Left),
        ("MADE (UTC)", Align::Left),
        ("UNTIL (UTC)", Align::Left),
    ];
    let mut table = Table::new(&columns);
    for token in tokens.all() {
        table.row([
            token.name.clone(),
            token.scope.name().to_owned(),
            minute(token.made),
            token.until.map_or_else(|| "revoked".to_owned(), minute),
        ]);
    }
    table.text(0)
}

fn minute(at: Stamp) -> String {
    let text = at.to_string();
    text.get(..16).unwrap_or(&text).replace('T', " ")
}
