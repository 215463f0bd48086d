//! `ebbmark watch`: the service, until it is told to stop.

use super::Ended;
use super::settings::Where;
use crate::clock::Clock;
use crate::mail;
use crate::service::{Service, Setup, StartError};
use clap::Args;
use sd_notify::NotifyState;
use std::io::IsTerminal;
use std::time::Duration;
use tokio::signal::unix::{SignalKind, signal};
use tracing_subscriber::EnvFilter;

/// Watch the export folder, decide, and tell people, until stopped
///
/// SIGTERM and SIGINT stop it in phases; SIGHUP reads settings, protocol and medicine list again, and goes on with the
/// last good ones where something is wrong.
#[derive(Debug, Args)]
pub(super) struct Watch {
    #[command(flatten)]
    place: Where,
    /// Write the log as JSON lines
    #[arg(long)]
    log_json: bool,
}

impl Watch {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        log(self.log_json);
        let runtime = match tokio::runtime::Builder::new_multi_thread()
            .worker_threads(2)
            .enable_all()
            .build()
        {
            Ok(runtime) => runtime,
            Err(error) => {
                eprintln!("error: cannot start the runtime: {error}");
                return Ended::Broken;
            }
        };
        let render = mail::renderer(&settings);
        let setup = Setup {
            settings,
            settings_file: self.place.settings.clone(),
            clock: Clock::System,
            render,
        };
        runtime.block_on(watch(setup))
    }
}

async fn watch(setup: Setup) -> Ended {
    let signals = (
        signal(SignalKind::terminate()),
        signal(SignalKind::interrupt()),
        signal(SignalKind::hangup()),
    );
    let (Ok(mut term), Ok(mut int), Ok(mut hangup)) = signals else {
        eprintln!("error: cannot listen for signals");
        return Ended::Broken;
    };
    let service = match Service::start(setup).await {
        Ok(service) => service,
        Err(error) => {
            eprintln!("error: {error}");
            return if matches!(error, StartError::Rulebooks(_)) {
                Ended::WrongUse
            } else {
                Ended::Broken
            };
        }
    };
    tell(&[NotifyState::Ready]);
    tracing::info!("watching");
    // The supervisor wants a sign twice within its patience; without a supervisor once in a while does no harm.
    let patience =
        sd_notify::watchdog_enabled().map_or(Duration::from_secs(60), |patience| patience / 2);
    let mut sign = tokio::time::interval(patience);
    let ended = loop {
        tokio::select! {
            _ = term.recv() => break Ended::Done,
            _ = int.recv() => break Ended::Done,
            () = service.failed() => break Ended::Broken,
            _ = hangup.recv() => {
                if service.reload().await.is_err() {
                    break Ended::Broken;
                }
            }
            _ = sign.tick() => {
                if service.is_alive().await {
                    tell(&[NotifyState::Watchdog]);
                } else {
                    tracing::error!("a part of the service no longer answers");
                }
            }
        }
    };
    tell(&[NotifyState::Stopping]);
    tracing::info!("stopping");
    match service.stop().await {
        Ok(()) if ended == Ended::Done => {
            tracing::info!("stopped");
            Ended::Done
        }
        _ => Ended::Broken,
    }
}

fn tell(state: &[NotifyState<'_>]) {
    if let Err(error) = sd_notify::notify(state) {
        tracing::warn!(%error, "the supervisor can't be told");
    }
}

/// Logs go to standard error, where a supervisor keeps them. `EBBMARK_LOG` sets what is logged.
fn log(json: bool) {
    let filter = EnvFilter::try_from_env("EBBMARK_LOG").unwrap_or_else(|_| EnvFilter::new("info"));
    let log = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(std::io::stderr)
        .with_target(false)
        .with_ansi(std::io::stderr().is_terminal());
    if json { log.json().init() } else { log.init() }
}
