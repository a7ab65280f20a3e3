//! A value computed off the paint thread, which keeps its last result while the next is under way.

use eframe::egui::Context;
use std::sync::mpsc::{Receiver, TryRecvError, channel};

/// The last value and the key it belongs to, and the one under way.
pub struct Later<K, T> {
    held: Option<(K, T)>,
    under_way: Option<(K, Receiver<T>)>,
}

impl<K, T> Default for Later<K, T> {
    fn default() -> Self {
        Self {
            held: None,
            under_way: None,
        }
    }
}

impl<K: PartialEq + Clone, T: Send + 'static> Later<K, T> {
    /// Asks for the value of `key`: starts a thread where it is neither held nor under way, and
    /// asks for a repaint when it is there. The stale one is dropped when it arrives.
    pub fn want(&mut self, ctx: &Context, key: &K, compute: impl FnOnce() -> T + Send + 'static) {
        self.poll();
        let held = self.held.as_ref().is_some_and(|(k, _)| k == key);
        let coming = self.under_way.as_ref().is_some_and(|(k, _)| k == key);
        if held {
            self.under_way = None;
        } else if !coming {
            let (sender, receiver) = channel();
            let ctx = ctx.clone();
            std::thread::spawn(move || {
                // Nobody listens any more when the key has changed; then the value is not wanted.
                if sender.send(compute()).is_ok() {
                    ctx.request_repaint();
                }
            });
            self.under_way = Some((key.clone(), receiver));
        }
    }

    fn poll(&mut self) {
        if let Some((key, receiver)) = self.under_way.take() {
            match receiver.try_recv() {
                Ok(value) => self.held = Some((key, value)),
                Err(TryRecvError::Empty) => self.under_way = Some((key, receiver)),
                Err(TryRecvError::Disconnected) => {}
            }
        }
    }

    /// The last value, of whichever key.
    pub fn last(&self) -> Option<&T> {
        self.held.as_ref().map(|(_, value)| value)
    }

    /// The key of the last value.
    pub fn last_key(&self) -> Option<&K> {
        self.held.as_ref().map(|(key, _)| key)
    }

    /// The value of `key`, if it is there.
    pub fn get(&self, key: &K) -> Option<&T> {
        self.held
            .as_ref()
            .filter(|(k, _)| k == key)
            .map(|(_, value)| value)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_last_value_stays_until_the_next_is_there() {
        let ctx = Context::default();
        let mut later = Later::default();
        let wait = |later: &mut Later<u32, u32>, key: u32| {
            while later.get(&key).is_none() {
                later.want(&ctx, &key, move || key * 10);
                std::thread::yield_now();
            }
        };
        wait(&mut later, 1);
        let (go, gate) = channel::<()>();
        later.want(&ctx, &2, move || {
            let _ = gate.recv();
            20
        });
        assert_eq!(later.last(), Some(&10));
        assert_eq!(later.get(&2), None);
        go.send(()).unwrap();
        wait(&mut later, 2);
        assert_eq!(later.last(), Some(&20));
    }
}
