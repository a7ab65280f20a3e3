//! Progress and cancellation, handed down through every long computation.

use crate::error::{Error, Result};
use std::sync::atomic::{AtomicBool, AtomicU32, Ordering};
use std::sync::{Arc, Mutex};

#[derive(Debug, Default)]
struct Shared {
    cancelled: AtomicBool,
    /// Bits of an f32 in 0..=1.
    fraction: AtomicU32,
    label: Mutex<String>,
}

/// A cheap handle that a worker reports to and a watcher reads and cancels.
///
/// Clones share the same state. [`Progress::part`] gives a handle that maps its own 0..1 onto a
/// part of the whole, so that a stage need not know where it stands in the job.
#[derive(Debug, Clone)]
pub struct Progress {
    shared: Arc<Shared>,
    from: f32,
    span: f32,
}

impl Default for Progress {
    fn default() -> Self {
        Self::new()
    }
}

impl Progress {
    /// A fresh handle at 0, not cancelled. Also what to pass where nobody watches.
    pub fn new() -> Self {
        Self {
            shared: Arc::default(),
            from: 0.0,
            span: 1.0,
        }
    }

    /// A handle whose 0..1 is `from..to` of this one's.
    #[must_use]
    pub fn part(&self, from: f32, to: f32) -> Self {
        Self {
            shared: Arc::clone(&self.shared),
            from: self.from + from * self.span,
            span: (to - from) * self.span,
        }
    }

    /// A handle that only answers a cancel: for one of several things done at once.
    #[must_use]
    pub fn silent(&self) -> Self {
        self.part(0.0, 0.0)
    }

    /// Reports the fraction done, 0..=1 of this handle's part.
    pub fn report(&self, fraction: f32) {
        if self.span == 0.0 {
            return;
        }
        let whole = (self.from + fraction.clamp(0.0, 1.0) * self.span).clamp(0.0, 1.0);
        self.shared
            .fraction
            .store(whole.to_bits(), Ordering::Relaxed);
    }

    /// Says in words what is being done now ("estimating the tip").
    pub fn say(&self, label: &str) {
        if self.span == 0.0 {
            return;
        }
        if let Ok(mut held) = self.shared.label.lock()
            && *held != label
        {
            label.clone_into(&mut held);
        }
    }

    /// Asks the worker to stop; it answers at its next [`Progress::check`].
    pub fn cancel(&self) {
        self.shared.cancelled.store(true, Ordering::Relaxed);
    }

    /// Whether cancellation was asked for.
    pub fn is_cancelled(&self) -> bool {
        self.shared.cancelled.load(Ordering::Relaxed)
    }

    /// Returns the error of kind `Cancelled` once cancellation was asked for.
    pub fn check(&self) -> Result<()> {
        if self.is_cancelled() {
            Err(Error::cancelled())
        } else {
            Ok(())
        }
    }

    /// The fraction of the whole that is done, 0..=1.
    pub fn fraction(&self) -> f32 {
        f32::from_bits(self.shared.fraction.load(Ordering::Relaxed))
    }

    /// What is being done now; empty before anything was said.
    pub fn label(&self) -> String {
        self.shared
            .label
            .lock()
            .map(|held| held.clone())
            .unwrap_or_default()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_part_maps_onto_the_whole() {
        let whole = Progress::new();
        let part = whole.part(0.5, 1.0).part(0.0, 0.5);
        part.report(1.0);
        assert!((whole.fraction() - 0.75).abs() < 1e-6);
    }

    #[test]
    fn a_silent_handle_only_answers_a_cancel() {
        let whole = Progress::new();
        whole.say("drawing");
        whole.report(0.4);
        let silent = whole.silent();
        silent.say("levelling");
        silent.report(0.1);
        assert_eq!((whole.label().as_str(), whole.fraction()), ("drawing", 0.4));
        whole.cancel();
        assert!(silent.check().is_err_and(|e| e.is_cancelled()));
    }

    #[test]
    fn cancelling_any_clone_stops_all() {
        let whole = Progress::new();
        let part = whole.part(0.1, 0.2);
        assert!(part.check().is_ok());
        whole.cancel();
        assert!(part.check().is_err_and(|e| e.is_cancelled()));
    }
}
