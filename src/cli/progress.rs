//! Progress: a bar on a terminal, plain lines elsewhere, always on stderr.

use super::Streams;
use crate::job::JobEvent;
use crate::scan::Event;
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::Write;
use std::time::{Duration, Instant};

/// Seconds between two plain lines.
const PLAIN_INTERVAL: Duration = Duration::from_secs(5);

/// Shows how a job gets on.
pub(super) struct Progress<'a> {
    shown: Shown<'a>,
    level: String,
    done: usize,
    planned: usize,
    lost: usize,
    begin: Instant,
}

enum Shown<'a> {
    Nothing,
    Bar(ProgressBar),
    Lines {
        err: &'a mut dyn Write,
        last: Option<Instant>,
    },
}

impl<'a> Progress<'a> {
    /// Progress as the streams and `--quiet` allow.
    pub(super) fn new(streams: &'a mut Streams<'_>, quiet: bool) -> Self {
        let shown = if quiet {
            Shown::Nothing
        } else if streams.terminal {
            let bar = ProgressBar::with_draw_target(None, ProgressDrawTarget::stderr());
            if let Ok(style) =
                ProgressStyle::with_template("{msg} [{bar:32}] {pos}/{len} points, {eta} left")
            {
                bar.set_style(style.progress_chars("━╸ "));
            }
            Shown::Bar(bar)
        } else {
            Shown::Lines {
                err: streams.err,
                last: None,
            }
        };
        Self {
            shown,
            level: String::new(),
            done: 0,
            planned: 0,
            lost: 0,
            begin: Instant::now(),
        }
    }

    /// Takes note of an event.
    pub(super) fn on(&mut self, event: &JobEvent<'_>) {
        match event {
            JobEvent::Walk {
                name,
                event: Event::Started { planned, .. },
                ..
            } => {
                self.level = (*name).to_owned();
                (self.done, self.planned, self.lost) = (0, *planned, 0);
                self.begin = Instant::now();
                if let Shown::Bar(bar) = &self.shown {
                    bar.reset();
                    bar.set_length(*planned as u64);
                    bar.set_message(self.level.clone());
                }
            }
            JobEvent::Walk {
                event: Event::Evaluated(entry),
                ..
            } => {
                self.done += 1;
                self.lost += usize::from(entry.record.energy.is_none());
                if let Shown::Bar(bar) = &self.shown {
                    bar.set_position(self.done as u64);
                } else {
                    self.line(false);
                }
            }
            JobEvent::Walk {
                event: Event::Extended { added },
                ..
            } => {
                self.planned += added;
                if let Shown::Bar(bar) = &self.shown {
                    bar.set_length(self.planned as u64);
                }
            }
            JobEvent::Walk {
                event: Event::Finished,
                ..
            } => self.line(true),
            JobEvent::Stationary(_)
            | JobEvent::Limit(_)
            | JobEvent::Onset(_)
            | JobEvent::LevelDone(_) => {}
        }
    }

    /// Removes the bar.
    pub(super) fn end(self) {
        if let Shown::Bar(bar) = &self.shown {
            bar.finish_and_clear();
        }
    }

    fn line(&mut self, last_of_level: bool) {
        let Shown::Lines { err, last } = &mut self.shown else {
            return;
        };
        let now = Instant::now();
        let due = last.is_none_or(|t| now - t >= PLAIN_INTERVAL);
        if !(due || last_of_level) {
            return;
        }
        *last = Some(now);
        let spent = self.begin.elapsed().as_secs_f64();
        let left = spent / self.done.max(1) as f64 * self.planned.saturating_sub(self.done) as f64;
        let lost = match self.lost {
            0 => String::new(),
            n => format!(", {n} not converged"),
        };
        // Progress is a courtesy: a closed stderr must not end the run.
        let _ = writeln!(
            err,
            "{}: {} of {} points{lost}, {spent:.1} s, about {left:.0} s left",
            self.level, self.done, self.planned
        );
    }
}
