//! The command line: one file a command.

mod agree;
mod alerts;
mod answer;
mod audit;
mod backup;
mod check;
mod held;
mod measure;
mod report;
mod settings;
mod watch;

use clap::{Parser, Subcommand};
use std::process::ExitCode;

/// Watches a ward's exported ECG tracings, results and medicine charts, measures QT, and tells the right person where
/// the hospital's own protocol says so.
///
/// It measures and points; it does not diagnose or prescribe. A qualified reader confirms on the tracing; local
/// protocol and the licensed clinician decide. No alert does not mean no risk.
#[derive(Debug, Parser)]
#[command(name = "ebbmark", version, max_term_width = 100)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    Watch(watch::Watch),
    Demo(crate::demo::Demo),
    Measure(measure::Measure),
    Check(check::Check),
    Alerts(alerts::Alerts),
    Answer(answer::AnswerTo),
    Held(held::Held),
    Report(report::Report),
    Agree(agree::Agree),
    Audit(audit::Audit),
    Backup(backup::Backup),
}

/// How a command ended; the exit code says it to whoever started it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Ended {
    /// Done.
    Done = 0,
    /// Done, and something was found that a person should see.
    Findings = 1,
    /// Wrong use or wrong settings.
    WrongUse = 2,
    /// Something broke.
    Broken = 3,
}

impl From<Ended> for ExitCode {
    fn from(ended: Ended) -> Self {
        ExitCode::from(ended as u8)
    }
}

/// The whole program: reads the command line, does what it says, and gives the exit code.
pub fn run() -> ExitCode {
    // Whatever this process makes, files of messages and patients above all, is its owner's alone.
    rustix::process::umask(rustix::fs::Mode::RWXG | rustix::fs::Mode::RWXO);
    let arguments = match Arguments::try_parse() {
        Ok(arguments) => arguments,
        Err(error) => {
            let ended = if error.use_stderr() { Ended::WrongUse } else { Ended::Done };
            // Nobody is there to read it: the exit code still says how it ended.
            let _ = error.print();
            return ended.into();
        }
    };
    match arguments.command {
        Command::Watch(watch) => watch.run(),
        Command::Demo(demo) => demo.run(),
        Command::Measure(measure) => measure.run(),
        Command::Check(check) => check.run(),
        Command::Alerts(alerts) => alerts.run(),
        Command::Answer(answer) => answer.run(),
        Command::Held(held) => held.run(),
        Command::Report(report) => report.run(),
        Command::Agree(agree) => agree.run(),
        Command::Audit(audit) => audit.run(),
        Command::Backup(backup) => backup.run(),
    }
    .into()
}

/// Says what broke.
fn broken(error: &dyn std::error::Error) -> Ended {
    eprintln!("error: {error}");
    Ended::Broken
}

/// Writes to standard output; `false` once nobody reads it any more, which ends a command quietly.
pub(crate) fn say(text: &str) -> bool {
    use std::io::Write;
    let mut out = std::io::stdout().lock();
    out.write_all(text.as_bytes()).and_then(|()| out.flush()).is_ok()
}
