//! Undo and redo of job edits.

use crate::job::JobFile;

/// How many edits can be undone.
const DEPTH: usize = 200;

/// The job with its past and future.
#[derive(Debug, Clone)]
pub struct History {
    now: JobFile,
    saved: JobFile,
    past: Vec<JobFile>,
    future: Vec<JobFile>,
    /// Edits of one gesture become one step.
    gesture: bool,
}

impl History {
    /// A job as it was opened.
    pub fn new(job: JobFile) -> Self {
        Self {
            saved: job.clone(),
            now: job,
            past: Vec::new(),
            future: Vec::new(),
            gesture: false,
        }
    }

    /// The job as it is.
    pub fn now(&self) -> &JobFile {
        &self.now
    }

    /// Whether it differs from what was saved or opened.
    pub fn unsaved(&self) -> bool {
        self.now != self.saved
    }

    /// Takes `job` as saved, keeping the past.
    pub fn mark_saved(&mut self, job: JobFile) {
        self.now.clone_from(&job);
        self.saved = job;
    }

    /// Makes even an untouched job count as unsaved (one recovered from a crash).
    pub fn mark_unsaved(&mut self, saved: JobFile) {
        self.saved = saved;
    }

    /// Changes the job; returns whether anything changed. `gesture`: one of many edits of a drag,
    /// all undone together.
    pub fn edit(&mut self, job: JobFile, gesture: bool) -> bool {
        if job == self.now {
            return false;
        }
        if !(gesture && self.gesture) {
            self.past.push(self.now.clone());
            if self.past.len() > DEPTH {
                self.past.remove(0);
            }
        }
        self.gesture = gesture;
        self.future.clear();
        self.now = job;
        true
    }

    /// The drag is over: the next edit is a step of its own.
    pub fn end_gesture(&mut self) {
        self.gesture = false;
    }

    /// Whether there is something to undo.
    pub fn can_undo(&self) -> bool {
        !self.past.is_empty()
    }

    /// Whether there is something to redo.
    pub fn can_redo(&self) -> bool {
        !self.future.is_empty()
    }

    /// One step back; returns whether there was one.
    pub fn undo(&mut self) -> bool {
        self.gesture = false;
        let Some(job) = self.past.pop() else {
            return false;
        };
        self.future.push(std::mem::replace(&mut self.now, job));
        true
    }

    /// One step forth; returns whether there was one.
    pub fn redo(&mut self) -> bool {
        self.gesture = false;
        let Some(job) = self.future.pop() else {
            return false;
        };
        self.past.push(std::mem::replace(&mut self.now, job));
        true
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn titled(title: &str) -> JobFile {
        JobFile {
            title: title.to_owned(),
            ..JobFile::on_scan("scan.tiff")
        }
    }

    #[test]
    fn back_and_forth() {
        let mut history = History::new(titled(""));
        assert!(!history.edit(titled(""), false));
        assert!(history.edit(titled("a"), false) && history.edit(titled("b"), false));
        assert!(history.unsaved() && history.undo());
        assert_eq!(history.now().title, "a");
        assert!(history.undo() && !history.undo() && !history.unsaved());
        assert!(history.redo() && history.redo() && !history.redo());
        assert_eq!(history.now().title, "b");
        history.undo();
        history.edit(titled("c"), false);
        assert!(!history.can_redo());
    }

    #[test]
    fn a_drag_is_one_step() {
        let mut history = History::new(titled(""));
        for title in ["a", "b", "c"] {
            history.edit(titled(title), true);
        }
        history.end_gesture();
        history.edit(titled("d"), true);
        assert!(history.undo());
        assert_eq!(history.now().title, "c");
        assert!(history.undo() && !history.can_undo());
        assert_eq!(history.now().title, "");
    }
}
