//! Progress on stderr: a bar on a terminal, a line a minute elsewhere, nothing when quiet.

use std::io::IsTerminal;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex, Once};
use std::time::Duration;

use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};

use crate::cli::say;
use crate::solve::{Interrupt, Progress, Watch};

/// Ticks of a full bar.
const BAR: u64 = 1000;

/// Time between lines where there is no terminal.
const LINE_EVERY: Duration = Duration::from_secs(60);

/// Runs shorter than this show no bar: it would only flicker.
const SHOW_AFTER: Duration = Duration::from_millis(500);

/// Looks on for a person.
pub struct Console {
    bar: Option<ProgressBar>,
    lines: bool,
    state: Mutex<State>,
    signalled: Arc<AtomicBool>,
    handlers: Once,
}

#[derive(Default)]
struct State {
    /// Relative gradient at the first report: where the bar begins.
    first: f64,
    last_line: Duration,
}

impl Console {
    pub fn new(quiet: bool) -> Self {
        let terminal = std::io::stderr().is_terminal();
        let bar = (terminal && !quiet).then(|| {
            let style = ProgressStyle::with_template("{bar:24} {msg}").expect("a valid template");
            ProgressBar::with_draw_target(Some(BAR), ProgressDrawTarget::stderr_with_hz(5))
                .with_style(style)
        });
        Self {
            bar,
            lines: !terminal && !quiet,
            state: Mutex::default(),
            signalled: Arc::new(AtomicBool::new(false)),
            handlers: Once::new(),
        }
    }

    /// Takes the bar away.
    pub fn close(&self) {
        if let Some(bar) = &self.bar {
            bar.finish_and_clear();
        }
    }

    /// From here a signal asks for an end after the current pass; a second INT ends at once. Not
    /// earlier: while files are read nothing can be lost, and the plain signal ends fastest.
    fn install_handlers(&self) {
        use signal_hook::consts::{SIGINT, SIGTERM, SIGUSR1, SIGUSR2, SIGXCPU};
        self.handlers.call_once(|| {
            let flag = || Arc::clone(&self.signalled);
            // 130: ended by INT, as shells report it. Only where the flag was set before.
            let _ = signal_hook::flag::register_conditional_shutdown(SIGINT, 130, flag());
            for signal in [SIGINT, SIGTERM, SIGUSR1, SIGUSR2, SIGXCPU] {
                let _ = signal_hook::flag::register(signal, flag());
            }
        });
    }
}

impl Watch for Console {
    fn progress(&self, progress: &Progress) {
        if self.bar.is_none() && !self.lines {
            return;
        }
        let mut state = self.state.lock().unwrap_or_else(std::sync::PoisonError::into_inner);
        if state.first == 0.0 {
            state.first = progress.relative_gradient;
        }
        let share = done_share(state.first, progress.relative_gradient, progress.tolerance);
        if let Some(bar) = self.bar.as_ref().filter(|_| progress.elapsed >= SHOW_AFTER) {
            bar.set_position((share * BAR as f64) as u64);
            bar.set_message(describe(progress, share));
        }
        if self.lines && progress.elapsed >= state.last_line + LINE_EVERY {
            state.last_line = progress.elapsed;
            say(&describe(progress, share));
        }
    }

    fn interrupted(&self) -> Option<Interrupt> {
        self.install_handlers();
        self.signalled.load(Ordering::Relaxed).then_some(Interrupt::Signal)
    }
}

/// How far the relative gradient has come from its first value to the tolerance, in decades.
fn done_share(first: f64, now: f64, tolerance: f64) -> f64 {
    let target = tolerance.max(f64::EPSILON);
    if !(first > target && now > 0.0) {
        return 0.0;
    }
    ((first / now).ln() / (first / target).ln()).clamp(0.0, 1.0)
}

fn describe(progress: &Progress, share: f64) -> String {
    let left = if share > 0.05 {
        let seconds = progress.elapsed.as_secs_f64() * (1.0 - share) / share;
        format!(", about {} left", clock(seconds))
    } else {
        String::new()
    };
    let tracks = if progress.tracks > 1 {
        format!(", {} of {} strengths left", progress.tracks_live, progress.tracks)
    } else {
        String::new()
    };
    format!(
        "iteration {}, gradient {:.1e} (to {:.0e}){tracks}, {}{left}",
        progress.iteration,
        progress.relative_gradient,
        progress.tolerance,
        clock(progress.elapsed.as_secs_f64())
    )
}

/// `42 s`, `3:05 min`, `2:10 h`.
fn clock(seconds: f64) -> String {
    let whole = seconds.round() as u64;
    match whole {
        0..60 => format!("{whole} s"),
        60..3600 => format!("{}:{:02} min", whole / 60, whole % 60),
        _ => format!("{}:{:02} h", whole / 3600, whole % 3600 / 60),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn share_is_counted_in_orders_of_magnitude() {
        assert!((done_share(1.0, 1e-4, 1e-8) - 0.5).abs() < 1e-12);
        assert_eq!(done_share(1.0, 1e-9, 1e-8), 1.0);
        assert_eq!(done_share(0.0, 0.0, 1e-8), 0.0);
        assert_eq!((clock(59.6).as_str(), clock(3700.0).as_str()), ("1:00 min", "1:01 h"));
    }
}
