//! Progress bars on a terminal, plain lines elsewhere, nothing when quiet.

use crate::progress::Progress;
use indicatif::{MultiProgress, ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::IsTerminal;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;

/// Where progress and messages go.
#[derive(Clone)]
pub struct Show {
    quiet: bool,
    bars: Option<MultiProgress>,
}

impl Show {
    /// Bars if stderr is a terminal; nothing when `quiet`.
    pub fn new(quiet: bool) -> Self {
        let bars = (!quiet && std::io::stderr().is_terminal())
            .then(|| MultiProgress::with_draw_target(ProgressDrawTarget::stderr()));
        Self { quiet, bars }
    }

    /// A message on stderr, unless quiet.
    pub fn note(&self, text: &str) {
        if !self.quiet {
            self.write(text);
        }
    }

    /// An error on stderr, always.
    pub fn error(&self, text: &str) {
        self.write(&format!("error: {text}"));
    }

    fn write(&self, text: &str) {
        match &self.bars {
            // Keeps bars and text from overwriting each other.
            Some(bars) => bars.suspend(|| eprintln!("{text}")),
            None => eprintln!("{text}"),
        }
    }

    /// Runs `work` and shows its progress under `name`.
    pub fn during<T>(&self, name: &str, work: impl FnOnce(&Progress) -> T) -> T {
        let progress = Progress::new();
        let Some(bars) = &self.bars else {
            return work(&progress);
        };
        let bar = bars.add(ProgressBar::new(1000));
        if let Ok(style) =
            ProgressStyle::with_template("{prefix:24!} {bar:30} {percent:>3} %  {msg}")
        {
            bar.set_style(style);
        }
        bar.set_prefix(name.to_owned());
        let done = Arc::new(AtomicBool::new(false));
        let painter = {
            let (progress, done, bar) = (progress.clone(), Arc::clone(&done), bar.clone());
            std::thread::spawn(move || {
                while !done.load(Ordering::Relaxed) {
                    bar.set_position((progress.fraction() * 1000.0) as u64);
                    bar.set_message(progress.label());
                    std::thread::park_timeout(Duration::from_millis(80));
                }
            })
        };
        let result = work(&progress);
        done.store(true, Ordering::Relaxed);
        painter.thread().unpark();
        // The painter only paints; its end matters no more than its start.
        let _ = painter.join();
        bar.finish_and_clear();
        result
    }
}
