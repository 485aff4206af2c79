//! One file a verb.
//!
//! A verb is a `clap::Args` struct in its own file with `fn run(self, context: &Context) -> Result<Exit, Failure>`. It is
//! listed once in `Verb` and once in its `run`; there is nothing else to do, and a verb that is not there yet is
//! in neither.

mod alarms;
mod check;
mod commission;
mod demo;
mod exit;
mod export;
mod forecast;
mod interrupt;
mod logs;
mod new;
mod progress;
mod reach;
mod replay;
mod report;
mod run;
mod standing;
mod summary;
pub mod table;
mod token;
mod verify;

use std::ffi::OsString;
use std::io::{ErrorKind, Write as _};

use clap::{Parser, Subcommand};

pub use exit::{Exit, Failure};
pub use summary::GroundSummary;

/// Watches the pressure of wells, dewatering and embankments, unattended at the site.
#[derive(Debug, Parser)]
#[command(name = "borewake", version, arg_required_else_help = true)]
#[command(after_help = "\
Exit codes: 0 done; 1 done, and what was asked for does not hold; 2 the command or site file is wrong;
3 the input or store cannot be used; 4 interrupted; 70 a panic in `run`.
Logs go to standard error; BOREWAKE_LOG=debug says more (also info, warn, or per room: borewake::intake=debug).")]
struct Cli {
    /// Prints one JSON document (or one JSON value a line, for what goes on) in place of text
    #[arg(long, global = true)]
    json: bool,
    #[command(subcommand)]
    verb: Verb,
}

/// What every verb is told.
#[derive(Debug, Clone, Copy)]
pub struct Context {
    /// Whether JSON is asked for on standard output.
    pub json: bool,
}

/// The verbs there are.
#[derive(Debug, Subcommand)]
enum Verb {
    Alarms(alarms::Alarms),
    Check(check::Check),
    Commission(commission::Commission),
    Demo(demo::Demo),
    Export(export::Export),
    Forecast(forecast::ForecastVerb),
    New(new::New),
    Reach(reach::ReachVerb),
    Replay(replay::Replay),
    Report(report::Report),
    Run(run::Run),
    Token(token::TokenVerb),
    Verify(verify::Verify),
}

impl Verb {
    fn run(self, context: &Context) -> Result<Exit, Failure> {
        match self {
            Self::Alarms(verb) => verb.run(context),
            Self::Check(verb) => verb.run(context),
            Self::Commission(verb) => verb.run(context),
            Self::Demo(verb) => verb.run(context),
            Self::Export(verb) => verb.run(context),
            Self::Forecast(verb) => verb.run(context),
            Self::New(verb) => verb.run(context),
            Self::Reach(verb) => verb.run(context),
            Self::Replay(verb) => verb.run(context),
            Self::Report(verb) => verb.run(context),
            Self::Run(verb) => verb.run(context),
            Self::Token(verb) => verb.run(context),
            Self::Verify(verb) => verb.run(context),
        }
    }
}

/// Runs the program on these arguments, the first of which is its own name, and gives the code to end with.
pub fn main(arguments: impl IntoIterator<Item = OsString>) -> Exit {
    let cli = match Cli::try_parse_from(arguments) {
        Ok(cli) => cli,
        Err(wrong) => {
            let exit = if wrong.use_stderr() {
                Exit::Wrong
            } else {
                Exit::Done
            };
            // Help into a closed pipe is no failure.
            let _ = wrong.print();
            return exit;
        }
    };
    logs::start();
    let context = Context { json: cli.json };
    // The daemon stops in good order by itself.
    if !matches!(cli.verb, Verb::Run(_))
        && let Err(why) = interrupt::end_when_interrupted()
    {
        let _ = writeln!(std::io::stderr(), "borewake: {why}");
        return Exit::Unusable;
    }
    match cli.verb.run(&context) {
        Ok(exit) => exit,
        Err(failure) => {
            // A closed standard error leaves the exit code to speak.
            let _ = writeln!(std::io::stderr(), "borewake: {failure}");
            failure.exit()
        }
    }
}

/// Writes text to standard output. A reader that has gone away (`| head`) is no failure.
///
/// # Errors
/// Standard output cannot be written.
pub fn print(text: &str) -> Result<(), Failure> {
    let mut out = std::io::stdout().lock();
    match out.write_all(text.as_bytes()).and_then(|()| out.flush()) {
        Err(e) if e.kind() != ErrorKind::BrokenPipe => Err(Failure::unusable(
            anyhow::Error::new(e).context("standard output"),
        )),
        _ => Ok(()),
    }
}
