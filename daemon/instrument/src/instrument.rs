//! An instrument of the site file: its conversation and its port together.

use core::time::Duration;

use hushwatch_config::dialect::{Coding, Dialect};
use hushwatch_config::site::{self, Clock, Flow, Parity};

use crate::error::InstrumentError;
use crate::link::{Line, Link, Listener, Probe};
use crate::machine::{Action, Machine, Rules};
use crate::plan::{SweepAnswer, SweepPlan};

/// A receiver on a serial port, asked for one sweep at a time.
#[derive(Debug)]
pub struct Instrument {
    machine: Machine,
    link: Link,
}

impl Instrument {
    /// The instrument as the site file describes it. The port is opened with the first sweep.
    pub fn new(instrument: &site::Instrument) -> Self {
        let port = instrument.port.display().to_string();
        let line = Line {
            port: port.clone(),
            baud: instrument.baud,
            parity: instrument.parity,
            stop_bits: instrument.stop_bits,
            flow: instrument.flow,
            dtr_on_open: instrument.dtr_on_open,
        };
        let rules = Rules {
            dialect: dialect_for(instrument),
            identity: instrument.identity.clone(),
            timeout: instrument.timeout.to_duration(),
            byte_time: line.byte_time(),
            attenuation_db: instrument.attenuation_db,
            unit: instrument.unit,
            ask_clock: instrument.clock == Clock::Instrument,
            port,
        };
        Self { machine: Machine::new(rules), link: Link::new(line) }
    }

    /// Sweeps once. After a lost port it first waits before opening it again: 0.25 s, doubled with each failure in a
    /// row up to 10 s.
    ///
    /// If the future is dropped half-way, the next sweep first brings the line in step again. It must be polled within
    /// a runtime with its I/O and time drivers on.
    ///
    /// # Errors
    /// There is no whole answer whose settings are those of the plan; see the class of the error for what is at fault.
    pub async fn sweep(&mut self, plan: &SweepPlan) -> Result<SweepAnswer, InstrumentError> {
        let mut action = self.machine.start(plan.clone());
        loop {
            if let Action::Finish(outcome) = action {
                return outcome;
            }
            let event = self.link.perform(&action).await;
            action = self.machine.step(event);
        }
    }

    /// Has every byte of the conversation told to a listener, both ways, as it goes over the line.
    pub fn listen(&mut self, listener: Listener) {
        self.link.listen(listener);
    }

    /// Who the instrument said it is, if the line is in step.
    pub fn identity(&self) -> Option<&str> {
        self.machine.identity()
    }

    /// The greatest number of points of one sweep, as far as is known: what the dialect tells, or less if the
    /// instrument has taken less.
    pub fn most_points(&self) -> u32 {
        self.machine.most_points()
    }

    /// Can the port be had? It is opened and closed again, which blocks for the time of two system calls and may
    /// restart a device that heeds DTR: to be asked once, before the first sweep. A path that does not exist is no
    /// error: the instrument may be plugged in later. Between two sweeps the port is this instrument's own: `Ok`.
    ///
    /// # Errors
    /// [`InstrumentError::Held`]: another process holds it. [`InstrumentError::Gone`]: it is there but cannot be
    /// opened (no permission, no serial port); that may yet change.
    pub fn probe_port(&self) -> Result<(), InstrumentError> {
        let port = self.link.port().to_owned();
        match self.link.probe() {
            Probe::Free | Probe::Absent => Ok(()),
            Probe::Held => Err(InstrumentError::Held { port }),
            Probe::Refused(why) => Err(InstrumentError::Gone { port, why }),
        }
    }
}

/// The dialect with the coding first that the site file asks for.
fn dialect_for(instrument: &site::Instrument) -> Dialect {
    let mut dialect = instrument.dialect.clone();
    // XON and XOFF would be taken out of a binary answer.
    let ascii_only = instrument.flow == Flow::Software;
    if ascii_only && dialect.formats.iter().any(|format| format.coding == Coding::Ascii) {
        dialect.formats.retain(|format| format.coding == Coding::Ascii);
    }
    dialect.formats.sort_by_key(|format| format.coding != instrument.format);
    dialect
}

impl Line {
    /// Time of one byte: start bit, eight data bits, parity and stop bits.
    fn byte_time(&self) -> Duration {
        let bits = 9 + u32::from(self.parity != Parity::None) + u32::from(self.stop_bits);
        Duration::from_secs(1) * bits / self.baud.max(1)
    }
}

#[cfg(test)]
mod tests;
