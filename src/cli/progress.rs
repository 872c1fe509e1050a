//! Shows how far a run is: a bar on a terminal, plain lines elsewhere, nothing when quiet;
//! and remembers how long each stage took.

use std::sync::{Mutex, MutexGuard, PoisonError};
use std::time::{Duration, Instant};

use asterskein::engine::Observer;
use asterskein::io::run_info::StageTime;
use asterskein::model::note::Note;
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};

use super::printer::Printer;

/// Plain lines about one stage come no more often than this.
const PLAIN_EVERY: Duration = Duration::from_secs(10);

/// Watches a run for a person.
#[derive(Debug)]
pub struct Progress {
    printer: Printer,
    bar: ProgressBar,
    state: Mutex<State>,
}

#[derive(Debug, Default)]
struct State {
    stages: Vec<StageTime>,
    current: Option<(&'static str, Instant)>,
    total: Option<u64>,
    done: u64,
    said: Option<Instant>,
    notes: Vec<Note>,
}

impl Progress {
    pub fn new(printer: &Printer) -> Self {
        let target = if printer.draws && !printer.quiet {
            ProgressDrawTarget::stderr()
        } else {
            ProgressDrawTarget::hidden()
        };
        Self {
            printer: printer.clone(),
            bar: ProgressBar::with_draw_target(None, target),
            state: Mutex::default(),
        }
    }

    /// Ends the last stage; gives the time of every stage and the notes that were passed.
    pub fn finish(&self) -> (Vec<StageTime>, Vec<Note>) {
        let mut state = self.state();
        state.close();
        self.bar.finish_and_clear();
        (
            std::mem::take(&mut state.stages),
            std::mem::take(&mut state.notes),
        )
    }

    fn state(&self) -> MutexGuard<'_, State> {
        self.state.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

impl State {
    fn silent_for(&self, time: Duration) -> bool {
        self.said.is_none_or(|t| t.elapsed() >= time)
    }

    /// A stage that comes back (rounds) adds to its earlier time.
    fn close(&mut self) {
        let Some((name, since)) = self.current.take() else {
            return;
        };
        let seconds = since.elapsed().as_secs_f64();
        match self.stages.iter_mut().find(|s| s.stage == name) {
            Some(stage) => stage.seconds += seconds,
            None => self.stages.push(StageTime {
                stage: name.to_owned(),
                seconds,
            }),
        }
    }
}

impl Observer for Progress {
    fn stage(&self, name: &'static str, total: Option<u64>) {
        let mut state = self.state();
        state.close();
        state.current = Some((name, Instant::now()));
        state.total = total;
        state.done = 0;
        // Rounds come back to the same stages: a plain line is for news, or a sign of life.
        let news = !state.stages.iter().any(|s| s.stage == name);
        let due = news || state.silent_for(PLAIN_EVERY);
        if due {
            state.said = Some(Instant::now());
        }
        if self.printer.draws {
            let template = match total {
                Some(_) => "{msg:28} {wide_bar} {pos}/{len} {eta:>4}",
                None => "{msg:28} {spinner} {elapsed}",
            };
            if let Ok(style) = ProgressStyle::with_template(template) {
                self.bar.set_style(style.progress_chars("=> "));
            }
            self.bar.set_length(total.unwrap_or(0));
            self.bar.set_position(0);
            self.bar.set_message(name);
            self.bar.enable_steady_tick(Duration::from_millis(200));
        } else if due {
            self.printer.talk(name);
        }
    }

    fn advance(&self, steps: u64) {
        if self.printer.draws {
            self.bar.inc(steps);
            return;
        }
        let mut state = self.state();
        state.done += steps;
        if state.silent_for(PLAIN_EVERY)
            && let (Some((name, _)), Some(total)) = (state.current, state.total)
        {
            self.printer
                .talk(&format!("{name}: {} of {total}", state.done));
            state.said = Some(Instant::now());
        }
    }

    fn note(&self, note: &Note) {
        self.state().notes.push(note.clone());
    }
}
