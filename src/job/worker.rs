//! Jobs in the background, for a window that must never wait.

use super::spec::Job;
use super::stages::{Outcome, Stages};
use crate::error::{Error, ErrorKind};
use crate::progress::Progress;
use std::sync::mpsc::{Receiver, Sender, channel};

struct Order {
    run: u64,
    job: Job,
    progress: Progress,
}

enum News {
    Partial(Outcome),
    Done(Result<Outcome, Error>),
}

/// Runs jobs one after the other on a thread of its own. It keeps the last outcome while the next
/// is under way; a new order cancels the one before, and what that still sends is dropped.
pub struct Worker {
    orders: Sender<Order>,
    news: Receiver<(u64, News)>,
    run: u64,
    under_way: Option<Progress>,
    latest: Outcome,
    error: Option<Error>,
}

impl Worker {
    /// Starts the thread; `wake` is called whenever there is news (to ask for a repaint).
    pub fn start(wake: impl Fn() + Send + 'static) -> Self {
        let (orders, inbox) = channel::<Order>();
        let (outbox, news) = channel();
        std::thread::spawn(move || {
            let mut stages = Stages::default();
            while let Ok(mut order) = inbox.recv() {
                // Only the newest order matters.
                while let Ok(newer) = inbox.try_recv() {
                    order = newer;
                }
                let send = |news| {
                    // The window may be gone; then nobody wants the news.
                    let _ = outbox.send((order.run, news));
                    wake();
                };
                let result = stages.run(&order.job, &order.progress, &mut |outcome| {
                    send(News::Partial(outcome.clone()));
                });
                send(News::Done(result));
            }
        });
        Self {
            orders,
            news,
            run: 0,
            under_way: None,
            latest: Outcome::default(),
            error: None,
        }
    }

    /// Orders `job` to be run; cancels what is under way.
    pub fn order(&mut self, job: Job) {
        self.cancel();
        self.run += 1;
        let progress = Progress::new();
        self.under_way = Some(progress.clone());
        self.error = None;
        let order = Order {
            run: self.run,
            job,
            progress,
        };
        if self.orders.send(order).is_err() {
            self.under_way = None;
            self.error = Some(
                Error::new(ErrorKind::Data, "the computing thread has stopped")
                    .remedy("Save the job and start the program again"),
            );
        }
    }

    /// Stops what is under way; the last outcome stays.
    pub fn cancel(&mut self) {
        if let Some(progress) = self.under_way.take() {
            progress.cancel();
        }
    }

    /// Takes in the news; returns whether anything changed.
    pub fn poll(&mut self) -> bool {
        let mut changed = false;
        while let Ok((run, news)) = self.news.try_recv() {
            if run != self.run {
                continue;
            }
            changed = true;
            match news {
                News::Partial(outcome) => self.latest = outcome,
                News::Done(result) => {
                    self.under_way = None;
                    match result {
                        Ok(outcome) => self.latest = outcome,
                        Err(error) if error.is_cancelled() => {}
                        Err(error) => self.error = Some(error),
                    }
                }
            }
        }
        changed
    }

    /// The last outcome, possibly of a run still under way.
    pub fn latest(&self) -> &Outcome {
        &self.latest
    }

    /// The run under way, if any.
    pub fn under_way(&self) -> Option<&Progress> {
        self.under_way.as_ref()
    }

    /// Why the last run failed, if it did.
    pub fn error(&self) -> Option<&Error> {
        self.error.as_ref()
    }
}
