//! `ebbmark demo`: an invented ward, played at speed through the real service: a real folder, a real database, real
//! .eml files. Only the clock is the story's, because time is an input here as everywhere.

mod narrator;
mod play;
mod record;
mod stage;

pub use play::{DemoError, Play, Stop};
pub use record::{record, summary};
pub use stage::Stage;

use crate::commands::{Ended, say};
use chrono::{DateTime, Utc};
use clap::Args;
use ebbmark_demo_ward::story::Story;
use narrator::Narrator;
use std::path::PathBuf;
use std::time::{Duration, Instant};

/// Watch an invented ward being looked after: three days in about a minute
///
/// Everything is real but the people and the clock: files are dropped into a folder and noticed there, facts and
/// alerts go into a database, messages are written as .eml files. Ctrl-C ends it.
#[derive(Debug, Args)]
pub(crate) struct Demo {
    /// Ward hours that pass in a second; 0 plays as fast as files are taken in
    #[arg(long, value_name = "HOURS", default_value_t = 1.2)]
    speed: f64,
    /// Leave folder, database and messages behind, to look at
    #[arg(long)]
    keep: bool,
    /// Play in this folder, which stays; a demo that was stopped or killed there goes on where it was
    #[arg(long, value_name = "FOLDER")]
    folder: Option<PathBuf>,
}

/// Said first and last.
const CAUTIONS: &str = "\
DEMO: an invented hospital with invented people. The protocol and the medicine list are examples that nobody signed.
Ebbmark measures and points; it does not diagnose or prescribe. A qualified reader confirms on the tracing; local
protocol and the licensed clinician decide. No alert does not mean no risk.
";

impl Demo {
    pub(crate) fn run(&self) -> Ended {
        if !self.speed.is_finite() || self.speed < 0.0 {
            eprintln!("error: --speed takes ward hours a second, 0 or more");
            return Ended::WrongUse;
        }
        let runtime =
            tokio::runtime::Builder::new_multi_thread().worker_threads(2).enable_all().build();
        let played = match runtime {
            Ok(runtime) => runtime.block_on(self.play()),
            Err(error) => Err(DemoError::Folder { doing: "start the runtime", source: error }),
        };
        match played {
            Ok(()) => Ended::Done,
            Err(error) => {
                eprintln!("error: {error}");
                Ended::Broken
            }
        }
    }

    async fn play(&self) -> Result<(), DemoError> {
        let story = Story::load()?;
        let temporary = match &self.folder {
            Some(_) => None,
            None => Some(
                tempfile::Builder::new()
                    .prefix("ebbmark-demo-")
                    .tempdir()
                    .map_err(DemoError::folder("make a temporary folder"))?,
            ),
        };
        let folder = match (&self.folder, &temporary) {
            (Some(folder), _) => folder.clone(),
            (None, Some(temporary)) => temporary.path().to_owned(),
            (None, None) => PathBuf::new(),
        };
        let stage = Stage::set(&folder, &story)?;
        say(&format!("{CAUTIONS}\nWard {} of {}, from {}.\n", story.ward, story.hospital, {
            story.days.local(story.begins).format("%A %-d %B %Y, %H:%M")
        }));
        let ended = tell(&story, &stage, self.speed).await;
        match temporary {
            Some(temporary) if self.keep || ended.is_err() => {
                let kept = temporary.keep();
                say(&format!("\n{}", what_is_left(&kept)));
            }
            Some(temporary) => {
                temporary.close().map_err(DemoError::folder("remove the temporary folder"))?;
                say("\nThe folder of this demo was removed; with --keep it stays.\n");
            }
            None => {
                say(&format!("\n{}", what_is_left(&folder)));
            }
        }
        say(&format!("\n{CAUTIONS}"));
        ended
    }
}

/// Plays the story to its end and says what happens as it happens.
async fn tell(story: &Story, stage: &Stage, speed: f64) -> Result<(), DemoError> {
    let (started, mut play) = (Instant::now(), Play::begin(story, stage).await?);
    let mut narrator = Narrator::new(story, &play.reader()?)?;
    let begun = play.now();
    let mut goes_on = true;
    // Between two moments everything is at rest, so that this is where it can end.
    let mut by_hand = std::pin::pin!(tokio::signal::ctrl_c());
    while let Some(stop) = play.next() {
        let due = started + wall(stop.at - begun, speed);
        tokio::select! {
            biased;
            _ = &mut by_hand => {
                say("\nStopped by hand, before the end of the story.\n");
                break;
            }
            () = tokio::time::sleep(due.saturating_duration_since(Instant::now())) => {}
        }
        goes_on = goes_on && say(&narrator.announce(&stop));
        play.go(&stop).await?;
        goes_on = goes_on && say(&narrator.news(stop.at, &play.reader()?)?);
        if !goes_on {
            break; // nobody reads it any more
        }
    }
    let reader = play.reader()?;
    say(&summary(story, &reader)?);
    drop(reader);
    play.end().await
}

/// How long story time takes on the wall.
fn wall(story: chrono::TimeDelta, speed: f64) -> Duration {
    let hours = story.as_seconds_f64() / 3600.0;
    if speed > 0.0 { Duration::from_secs_f64((hours / speed).max(0.0)) } else { Duration::ZERO }
}

fn what_is_left(folder: &std::path::Path) -> String {
    format!(
        "Left behind in {0}:\n  export/  what the hospital sent    mail/  the messages, one .eml each\n  store/   the database             ebbmark.toml, protocol.toml, medicines.toml\nTry: ebbmark alerts --all --settings {0}/ebbmark.toml\n",
        folder.display()
    )
}

/// A moment as the story tells it.
fn moment(story: &Story, at: DateTime<Utc>) -> String {
    format!("Day {}", story.days.told(at))
}
