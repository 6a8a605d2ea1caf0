//! Is everybody still at work? Each part of the service promises to be heard of again within a time; systemd's watchdog
//! is fed only as long as all keep their promise. So it is fed while cables are swept, while one waits for the next turn,
//! and while a lost port is tried again in order, but not when a part hangs.

use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

use tokio::sync::watch as signal;
use tokio::time::Instant;

/// Promises of a number of parts.
#[derive(Debug)]
pub(crate) struct Pulse {
    begun: Instant,
    /// By when each part will be heard of, milliseconds since the beginning.
    due: Vec<AtomicU64>,
}

impl Pulse {
    /// All parts have a minute to be heard of for the first time.
    pub(crate) fn new(parts: usize) -> Self {
        let first = millis(Duration::from_mins(1));
        Self { begun: Instant::now(), due: (0..parts).map(|_| AtomicU64::new(first)).collect() }
    }

    /// A part is at work, and will be heard of within this time.
    pub(crate) fn promise(&self, part: usize, within: Duration) {
        if let Some(due) = self.due.get(part) {
            due.store(millis(self.begun.elapsed()).saturating_add(millis(within)), Ordering::Relaxed);
        }
    }

    /// The first part that has broken its promise.
    pub(crate) fn overdue(&self) -> Option<usize> {
        let now = millis(self.begun.elapsed());
        self.due.iter().position(|due| due.load(Ordering::Relaxed) < now)
    }
}

fn millis(time: Duration) -> u64 {
    u64::try_from(time.as_millis()).unwrap_or(u64::MAX)
}

/// Feeds systemd's watchdog, if there is one, until told to stop.
pub(crate) async fn feed(pulse: &Pulse, names: &[String], mut stop: signal::Receiver<bool>) {
    let Some(limit) = sd_notify::watchdog_enabled() else { return };
    let mut told = None;
    loop {
        match pulse.overdue() {
            None => {
                told = None;
                say(&[sd_notify::NotifyState::Watchdog]);
            }
            Some(part) if told != Some(part) => {
                told = Some(part);
                let name = names.get(part).map_or("a part", String::as_str);
                tracing::error!("{name} is not heard of: the watchdog is not fed");
            }
            Some(_) => {}
        }
        tokio::select! {
            _ = stop.wait_for(|stop| *stop) => return,
            () = tokio::time::sleep(limit / 3) => {}
        }
    }
}

/// Tells the service manager, if there is one.
pub(crate) fn say(state: &[sd_notify::NotifyState<'_>]) {
    if let Err(error) = sd_notify::notify(state) {
        tracing::warn!("the service manager cannot be told: {error}");
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_promise_holds_for_its_time_and_no_longer() {
        let pulse = Pulse::new(2);
        assert_eq!(pulse.overdue(), None);
        pulse.promise(1, Duration::ZERO);
        std::thread::sleep(Duration::from_millis(5));
        assert_eq!(pulse.overdue(), Some(1));
        pulse.promise(1, Duration::from_hours(1));
        assert_eq!(pulse.overdue(), None);
        pulse.promise(7, Duration::ZERO);
        assert_eq!(pulse.overdue(), None, "there is no such part");
    }
}
