//! The serial port, and the clock: each [`Action`] of the machine is carried out here and ends in one [`Event`].
//!
//! A read of nothing and any error of the port mean that it is gone: it is closed at once, since a hung-up terminal
//! answers each further read with nothing, immediately. What is written is never flushed: waiting for the last bit to
//! leave blocks the whole runtime, for ever if the other side holds the line. Every wait has an end, every buffer a
//! bound.

use core::time::Duration;

use hushwatch_config::site::{Flow, Parity};
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::time::{Instant, sleep, timeout, timeout_at};
use tokio_serial::{
    ClearBuffer, DataBits, ErrorKind, FlowControl, SerialPort, SerialPortBuilder, SerialStream, StopBits,
};
use tracing::{debug, trace};

use crate::error::{Garbage, readable};
use crate::framing::{Answer, Decoder, Expected};
use crate::machine::{Action, Event, Patience};

/// Bytes that are read at once.
const PIECE: usize = 4096;
/// How long a command may wait to be written, beside the time of its bytes on the line.
const WRITE_LIMIT: Duration = Duration::from_secs(1);

/// How the port is to be opened.
#[derive(Clone, Debug)]
pub struct Line {
    /// Its path.
    pub port: String,
    /// Bits per second.
    pub baud: u32,
    /// Parity bit.
    pub parity: Parity,
    /// Stop bits, 1 or 2.
    pub stop_bits: u8,
    /// Flow control.
    pub flow: Flow,
    /// Is DTR raised (or taken down) when it is opened? `None` leaves it to the driver.
    pub dtr_on_open: Option<bool>,
}

impl Line {
    fn builder(&self) -> SerialPortBuilder {
        let builder = tokio_serial::new(self.port.clone(), self.baud)
            .data_bits(DataBits::Eight)
            .parity(match self.parity {
                Parity::None => tokio_serial::Parity::None,
                Parity::Even => tokio_serial::Parity::Even,
                Parity::Odd => tokio_serial::Parity::Odd,
            })
            .stop_bits(if self.stop_bits == 2 { StopBits::Two } else { StopBits::One })
            .flow_control(match self.flow {
                Flow::None => FlowControl::None,
                Flow::Hardware => FlowControl::Hardware,
                Flow::Software => FlowControl::Software,
            })
            .exclusive(true);
        match self.dtr_on_open {
            // Where there is no such line, as on a pseudo-terminal, this is passed over.
            Some(raised) => builder.dtr_on_open(raised),
            None => builder.preserve_dtr_on_open(),
        }
    }
}

/// Whether a port can be had.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Probe {
    /// It can, or it is this link's own already.
    Free,
    /// There is no such path.
    Absent,
    /// Another process holds it.
    Held,
    /// It cannot be opened; with what the system says.
    Refused(String),
}

impl Probe {
    fn from_error(error: &tokio_serial::Error) -> Self {
        match error.kind {
            // Told where the terminal is in exclusive mode (EBUSY) or its lock is taken (EWOULDBLOCK), and only there.
            ErrorKind::NoDevice => Self::Held,
            ErrorKind::Io(std::io::ErrorKind::NotFound) => Self::Absent,
            _ => Self::Refused(error.to_string()),
        }
    }
}

/// A serial port that is opened, closed and opened again.
pub struct Link {
    line: Line,
    port: Option<SerialStream>,
    buffer: Box<[u8]>,
    listener: Option<Listener>,
}

/// Which way bytes went.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Way {
    /// To the instrument.
    Sent,
    /// From the instrument, also what nobody asked for.
    Received,
}

/// Is told every byte that goes over the line, as it goes.
pub type Listener = Box<dyn FnMut(Way, &[u8]) + Send>;

/// The port is not there any more.
struct Lost(String);

impl From<std::io::Error> for Lost {
    fn from(error: std::io::Error) -> Self {
        Self(error.to_string())
    }
}

impl Link {
    /// Nothing is opened yet.
    pub fn new(line: Line) -> Self {
        Self { line, port: None, buffer: vec![0; PIECE].into_boxed_slice(), listener: None }
    }

    /// The path of the port.
    pub fn port(&self) -> &str {
        &self.line.port
    }

    /// Has every byte told to a listener from now on.
    pub fn listen(&mut self, listener: Listener) {
        self.listener = Some(listener);
    }

    /// Carries an action out; [`Action::Finish`] asks for nothing and is done at once.
    ///
    /// # Panics
    /// Outside of a runtime with its I/O and time drivers on.
    pub async fn perform(&mut self, action: &Action) -> Event {
        let outcome = match action {
            Action::Open { after } => return self.open(*after).await,
            Action::Tell { bytes } => self.tell(bytes).await,
            Action::Ask { bytes, expected, patience } => self.ask(bytes, *expected, *patience).await,
            Action::Drain { quiet, at_most } => self.drain(*quiet, *at_most).await,
            Action::Pause(time) => {
                sleep(*time).await;
                Ok(Event::Done)
            }
            Action::Finish(_) => Ok(Event::Done),
        };
        outcome.unwrap_or_else(|Lost(why)| {
            debug!(port = self.line.port, why, "the port is gone");
            self.close();
            Event::Gone(why)
        })
    }

    /// Whether the port can be had: opens it and closes it again.
    pub fn probe(&self) -> Probe {
        if self.port.is_some() {
            return Probe::Free;
        }
        match self.line.builder().open_native() {
            Ok(mut port) => {
                // A terminal that somebody else keeps open would stay exclusive.
                let _ = port.set_exclusive(false);
                Probe::Free
            }
            Err(error) => Probe::from_error(&error),
        }
    }

    async fn open(&mut self, after: Duration) -> Event {
        self.close();
        if !after.is_zero() {
            sleep(after).await;
        }
        let opened = SerialStream::open(&self.line.builder()).and_then(|port| {
            // What was sent before anybody listened here is nobody's answer.
            port.clear(ClearBuffer::All)?;
            Ok(port)
        });
        match opened {
            Ok(port) => {
                debug!(port = self.line.port, baud = self.line.baud, "the port is open");
                self.port = Some(port);
                Event::Opened
            }
            Err(error) => match Probe::from_error(&error) {
                Probe::Held => Event::Held,
                _ => Event::Gone(error.to_string()),
            },
        }
    }

    fn close(&mut self) {
        if let Some(mut port) = self.port.take() {
            // Else closing waits until what was written has left, which it may never do. A port that is gone refuses
            // both, and needs neither.
            let _ = port.clear(ClearBuffer::All);
            let _ = port.set_exclusive(false);
        }
    }

    async fn tell(&mut self, bytes: &[u8]) -> Result<Event, Lost> {
        let port = self.port.as_mut().ok_or_else(closed)?;
        if let Some(unasked) = waiting(port, &mut self.buffer, &mut self.listener)? {
            return Ok(Event::Garbled(Garbage::Unasked(unasked)));
        }
        trace!(port = self.line.port, "> {}", readable(bytes));
        heard(&mut self.listener, Way::Sent, bytes);
        let limit = WRITE_LIMIT + self.line.time_of(bytes.len()) * 2;
        match timeout(limit, port.write_all(bytes)).await {
            Ok(written) => written.map(|()| Event::Done).map_err(Lost::from),
            Err(_) => Ok(Event::TimedOut),
        }
    }

    async fn ask(&mut self, bytes: &[u8], expected: Expected, patience: Patience) -> Result<Event, Lost> {
        match self.tell(bytes).await? {
            Event::Done => {}
            other => return Ok(other),
        }
        let port = self.port.as_mut().ok_or_else(closed)?;
        let mut decoder = Decoder::new(expected);
        let mut until = Instant::now() + patience.first;
        let mut whole = None;
        loop {
            let Ok(read) = timeout_at(until, port.read(&mut self.buffer)).await else { return Ok(Event::TimedOut) };
            let piece = &self.buffer[..some(read?)?];
            heard(&mut self.listener, Way::Received, piece);
            match decoder.push(piece) {
                Ok(Some(answer)) => {
                    let (Answer::Line(text) | Answer::Block(text)) = &answer;
                    trace!(port = self.line.port, "< {} ({} bytes)", readable(text), text.len());
                    return Ok(Event::Answered(answer));
                }
                Ok(None) => {}
                Err(what) => return Ok(Event::Garbled(what.into())),
            }
            // The end of an answer before may have come first.
            if !decoder.is_empty() {
                let now = Instant::now();
                let end = *whole.get_or_insert(now + patience.whole);
                until = end.min(now + patience.between);
            }
        }
    }

    async fn drain(&mut self, quiet: Duration, at_most: Duration) -> Result<Event, Lost> {
        let port = self.port.as_mut().ok_or_else(closed)?;
        let end = Instant::now() + at_most;
        let mut dropped = 0usize;
        loop {
            let until = Instant::now() + quiet;
            if until > end {
                return Ok(Event::Restless);
            }
            let Ok(read) = timeout_at(until, port.read(&mut self.buffer)).await else {
                trace!(port = self.line.port, dropped, "quiet");
                return Ok(Event::Quiet);
            };
            let count = some(read?)?;
            heard(&mut self.listener, Way::Received, &self.buffer[..count]);
            dropped = dropped.saturating_add(count);
        }
    }
}

impl Line {
    /// Time of so many bytes on the line, at the eleven or twelve bits that a byte has at most.
    fn time_of(&self, bytes: usize) -> Duration {
        let bits = u32::try_from(bytes).unwrap_or(u32::MAX).saturating_mul(12);
        Duration::from_secs(1).saturating_mul(bits) / self.baud.max(1)
    }
}

impl Drop for Link {
    fn drop(&mut self) {
        self.close();
    }
}

impl core::fmt::Debug for Link {
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        f.debug_struct("Link").field("line", &self.line).field("open", &self.port.is_some()).finish_non_exhaustive()
    }
}

fn closed() -> Lost {
    Lost("it is not open".to_owned())
}

fn heard(listener: &mut Option<Listener>, way: Way, bytes: &[u8]) {
    if let Some(listener) = listener {
        listener(way, bytes);
    }
}

/// Reading nothing is a hang-up.
fn some(count: usize) -> Result<usize, Lost> {
    if count == 0 { Err(Lost("it was hung up".to_owned())) } else { Ok(count) }
}

/// What has come that nobody asked for, beside the late end of a line.
fn waiting(
    port: &mut SerialStream,
    buffer: &mut [u8],
    listener: &mut Option<Listener>,
) -> Result<Option<String>, Lost> {
    match port.try_read(buffer) {
        Ok(count) => {
            let bytes = &buffer[..some(count)?];
            heard(listener, Way::Received, bytes);
            let ends_only = bytes.iter().all(|byte| matches!(byte, b'\r' | b'\n'));
            Ok((!ends_only).then(|| readable(bytes)))
        }
        Err(error) if matches!(error.kind(), std::io::ErrorKind::WouldBlock | std::io::ErrorKind::Interrupted) => {
            Ok(None)
        }
        Err(error) => Err(error.into()),
    }
}

#[cfg(test)]
mod tests;
