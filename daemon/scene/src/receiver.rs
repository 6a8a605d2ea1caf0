//! The receiver on a pseudo-terminal: a thread that reads, answers in time, and paces its bytes.

use std::fs::File;
use std::io::{ErrorKind, Read, Write};
use std::os::unix::fs::symlink;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, AtomicI64, Ordering};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

use hushwatch_config::scene::Scene;
use hushwatch_quantity::Time;
use rustix::event::{PollFd, PollFlags, Timespec, poll};
use rustix::fs::{Mode, OFlags};
use rustix::pty::{OpenptFlags, grantpt, openpt, ptsname, unlockpt};
use rustix::termios::{OptionalActions, tcgetattr, tcsetattr};
use thiserror::Error;

use crate::cabinet::Cabinet;
use crate::device::{Device, Outage, Reply};

/// Where time goes in lockstep, an outage of hours takes so long: enough for whoever listens to notice.
const OUTAGE: Duration = Duration::from_secs(3);

/// How often the thread looks whether it is to stop, or whether something is due to happen.
const LOOK: Duration = Duration::from_millis(50);

/// Why there is no receiver.
#[derive(Debug, Error)]
pub enum SceneError {
    /// Something lies where its port is to be, and it is no link.
    #[error("{} is there already and is no link; it was not touched", .0.display())]
    Taken(PathBuf),
    /// The system gives no terminal, or no link to it.
    #[error("the simulated receiver's port {}: {source}", path.display())]
    Terminal {
        /// The path of the port.
        path: PathBuf,
        /// What the system says.
        source: std::io::Error,
    },
}

/// How the receiver is to be plugged in.
#[derive(Clone, Debug)]
pub struct Options {
    /// The path of its port: a link to the terminal, which keeps its name when the terminal changes.
    pub link: PathBuf,
    /// Are bytes sent as slowly as the scene's baud rate says?
    pub pace: bool,
}

/// A receiver that answers on its port until it is dropped.
#[derive(Debug)]
pub struct SimulatedReceiver {
    shared: Arc<Shared>,
    link: PathBuf,
    thread: Option<JoinHandle<()>>,
}

#[derive(Debug)]
struct Shared {
    stop: AtomicBool,
    over: AtomicBool,
    plant_us: AtomicI64,
}

impl SimulatedReceiver {
    /// Plugs it in.
    ///
    /// # Errors
    /// Something else lies at the port's path, or the system gives no terminal.
    pub fn start(scene: Scene, options: Options) -> Result<Self, SceneError> {
        let shared = Arc::new(Shared {
            stop: AtomicBool::new(false),
            over: AtomicBool::new(false),
            plant_us: AtomicI64::new(scene.start.as_micros()),
        });
        let Options { link, pace } = options;
        let port = Port::plug_in(&link)?;
        let byte_time = if pace { Duration::from_secs(10) / scene.receiver.baud.max(1) } else { Duration::ZERO };
        let lockstep = scene.step.is_some();
        let worker = Worker {
            device: Device::new(Cabinet::new(scene)),
            shared: Arc::clone(&shared),
            link: link.clone(),
            port: Some(port),
            byte_time,
            lockstep,
            started: Instant::now(),
        };
        let thread = std::thread::Builder::new()
            .name("receiver".into())
            .spawn(move || worker.run())
            .map_err(|source| SceneError::Terminal { path: link.clone(), source })?;
        Ok(Self { shared, link, thread: Some(thread) })
    }

    /// The path of its port.
    pub fn port_path(&self) -> &Path {
        &self.link
    }

    /// The present plant time.
    pub fn plant_time(&self) -> Time {
        Time::from_micros(self.shared.plant_us.load(Ordering::Relaxed))
    }

    /// Is the scene over? It goes on as it was.
    pub fn is_over(&self) -> bool {
        self.shared.over.load(Ordering::Relaxed)
    }
}

impl Drop for SimulatedReceiver {
    fn drop(&mut self) {
        self.shared.stop.store(true, Ordering::Relaxed);
        if let Some(thread) = self.thread.take() {
            // It ended by itself or by a panic that has been told.
            let _ = thread.join();
        }
        remove_link(&self.link);
    }
}

/// Both ends of a terminal. The far end is kept open, so that it does not hang up whenever its last reader leaves.
struct Port {
    master: File,
    _slave: rustix::fd::OwnedFd,
}

impl Port {
    fn plug_in(link: &Path) -> Result<Self, SceneError> {
        let wrong = |source: std::io::Error| SceneError::Terminal { path: link.to_owned(), source };
        match std::fs::symlink_metadata(link) {
            Ok(found) if !found.file_type().is_symlink() => return Err(SceneError::Taken(link.to_owned())),
            Ok(_) => std::fs::remove_file(link).map_err(wrong)?,
            Err(_) => {}
        }
        let open = || -> rustix::io::Result<(rustix::fd::OwnedFd, rustix::fd::OwnedFd, PathBuf)> {
            // Programs that are started meanwhile must not hold it open when it is unplugged.
            let master = openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY | OpenptFlags::CLOEXEC)?;
            grantpt(&master)?;
            unlockpt(&master)?;
            let name = ptsname(&master, Vec::new())?;
            let path = PathBuf::from(name.to_string_lossy().into_owned());
            let slave = rustix::fs::open(&path, OFlags::RDWR | OFlags::NOCTTY | OFlags::CLOEXEC, Mode::empty())?;
            // A terminal starts with echo and line editing: what is answered would come back.
            let mut raw = tcgetattr(&slave)?;
            raw.make_raw();
            tcsetattr(&slave, OptionalActions::Now, &raw)?;
            rustix::io::ioctl_fionbio(&master, true)?;
            Ok((master, slave, path))
        };
        let (master, slave, path) = open().map_err(|error| wrong(error.into()))?;
        symlink(path, link).map_err(wrong)?;
        Ok(Self { master: File::from(master), _slave: slave })
    }
}

struct Worker {
    device: Device,
    shared: Arc<Shared>,
    link: PathBuf,
    port: Option<Port>,
    byte_time: Duration,
    lockstep: bool,
    started: Instant,
}

impl Worker {
    fn run(mut self) {
        let mut buffer = [0; 4096];
        while !self.is_stopped() {
            self.tell_time();
            if let Some(outage) = self.device.outage(self.started.elapsed()) {
                self.be_away(outage);
                continue;
            }
            match self.read(&mut buffer) {
                Ok(count) => {
                    let replies = self.device.receive(&buffer[..count], self.started.elapsed());
                    for reply in replies {
                        self.tell_time();
                        if self.answer(&reply).is_err() {
                            return;
                        }
                    }
                }
                Err(error) => {
                    tracing::error!("the simulated receiver's port: {error}");
                    return;
                }
            }
        }
    }

    fn is_stopped(&self) -> bool {
        self.shared.stop.load(Ordering::Relaxed)
    }

    fn tell_time(&self) {
        let now = self.started.elapsed();
        self.shared.plant_us.store(self.device.plant_time(now).as_micros(), Ordering::Relaxed);
        if self.device.is_over(now) {
            self.shared.over.store(true, Ordering::Relaxed);
        }
    }

    /// What has come; nothing after a while without anything.
    fn read(&mut self, buffer: &mut [u8]) -> std::io::Result<usize> {
        let Some(port) = &mut self.port else {
            // There was no terminal to plug in again: nothing can come, and asking on and on would take a whole core.
            std::thread::sleep(LOOK);
            return Ok(0);
        };
        if !ready(&port.master, PollFlags::IN)? {
            return Ok(0);
        }
        match port.master.read(buffer) {
            Err(error) if error.kind() == ErrorKind::WouldBlock || error.kind() == ErrorKind::Interrupted => Ok(0),
            read => read,
        }
    }

    /// Sends a reply when it is due, as fast as the line is.
    fn answer(&mut self, reply: &Reply) -> std::io::Result<()> {
        self.sleep_until(reply.due);
        // In pieces of a few milliseconds, as a driver hands them over.
        let piece = if self.byte_time.is_zero() {
            reply.bytes.len().max(1)
        } else {
            (Duration::from_millis(5).as_nanos() / self.byte_time.as_nanos().max(1)).clamp(1, 4096) as usize
        };
        for bytes in reply.bytes.chunks(piece) {
            let due = self.started.elapsed() + self.byte_time * u32::try_from(bytes.len()).unwrap_or(u32::MAX);
            self.write(bytes)?;
            if !self.byte_time.is_zero() {
                self.sleep_until(due);
            }
        }
        Ok(())
    }

    fn write(&mut self, mut bytes: &[u8]) -> std::io::Result<()> {
        let stop = Arc::clone(&self.shared);
        let Some(port) = &mut self.port else { return Ok(()) };
        // Nobody may be reading: then it waits, but not longer than it lives.
        while !bytes.is_empty() && !stop.stop.load(Ordering::Relaxed) {
            if !ready(&port.master, PollFlags::OUT)? {
                continue;
            }
            match port.master.write(bytes) {
                Ok(count) => bytes = &bytes[count..],
                Err(error) if matches!(error.kind(), ErrorKind::WouldBlock | ErrorKind::Interrupted) => {}
                Err(error) => return Err(error),
            }
        }
        Ok(())
    }

    fn sleep_until(&self, due: Duration) {
        while let Some(left) = due.checked_sub(self.started.elapsed()).filter(|left| !left.is_zero()) {
            if self.is_stopped() {
                return;
            }
            std::thread::sleep(left.min(LOOK));
        }
    }

    /// Is silent or unplugged for a while; plant time goes on meanwhile.
    fn be_away(&mut self, outage: Outage) {
        let (lasts, unplugged) = match outage {
            Outage::Silent(lasts) => (lasts, false),
            Outage::Unplugged(lasts) => (lasts, true),
        };
        let real = if self.lockstep { OUTAGE } else { lasts.to_duration() };
        if unplugged {
            remove_link(&self.link);
            self.port = None;
        }
        self.sleep_until(self.started.elapsed() + real);
        if self.lockstep {
            self.device.skip(lasts);
        }
        if unplugged {
            self.device.power_cycle();
            match Port::plug_in(&self.link) {
                Ok(port) => self.port = Some(port),
                Err(error) => tracing::error!("plugged in again: {error}"),
            }
        } else {
            self.throw_away();
        }
    }

    /// What was asked of a silent receiver stays unanswered.
    fn throw_away(&mut self) {
        let mut buffer = [0; 4096];
        while matches!(self.read(&mut buffer), Ok(1..)) {}
        self.device.power_cycle();
    }
}

/// Takes the link away. What somebody else has put there meanwhile is no link and is left alone.
fn remove_link(path: &Path) {
    if std::fs::symlink_metadata(path).is_ok_and(|found| found.file_type().is_symlink()) {
        let _ = std::fs::remove_file(path);
    }
}

/// Is the terminal ready for this within [`LOOK`]?
fn ready(master: &File, flags: PollFlags) -> std::io::Result<bool> {
    let mut polled = [PollFd::new(master, flags)];
    let patience = Timespec { tv_sec: 0, tv_nsec: LOOK.as_nanos() as i64 };
    match poll(&mut polled, Some(&patience)) {
        Ok(count) => Ok(count > 0),
        Err(rustix::io::Errno::INTR) => Ok(false),
        Err(error) => Err(error.into()),
    }
}

#[cfg(test)]
mod tests {
    use hushwatch_quantity::Span;

    use super::*;
    use crate::cabinet::tests::scene;

    /// Opens the port as a client does and asks one question.
    fn ask(port: &Path, line: &str) -> String {
        let mut file = File::options().read(true).write(true).open(port).expect("the port opens");
        file.write_all(format!("{line}\n").as_bytes()).expect("written");
        let mut answer = Vec::new();
        let mut byte = [0];
        while file.read(&mut byte).expect("a byte") == 1 && byte[0] != b'\n' {
            answer.push(byte[0]);
        }
        String::from_utf8(answer).expect("text")
    }

    #[test]
    fn it_answers_on_its_port_and_takes_it_away_with_it() {
        let folder = tempfile::tempdir().expect("a folder");
        let link = folder.path().join("rx1");
        let options = Options { link: link.clone(), pace: false };
        let receiver = SimulatedReceiver::start(scene(), options).expect("plugged in");
        assert_eq!(ask(&link, "*IDN?"), "Simulated,RX-2044,417,1.0");
        let before = receiver.plant_time();
        let trace = ask(&link, "FREQ:STAR 2E6;STOP 1E7;:SWE:POIN 81;:INIT;:TRAC? TRACE1");
        assert_eq!(trace.split(',').count(), 81);
        assert_eq!(ask(&link, "*OPC?"), "1");
        assert_eq!(receiver.plant_time() - before, Span::from_mins(3));
        drop(receiver);
        assert!(std::fs::symlink_metadata(&link).is_err());
    }

    #[test]
    fn what_lies_there_is_left_alone() {
        let folder = tempfile::tempdir().expect("a folder");
        let link = folder.path().join("rx1");
        std::fs::write(&link, "dear aunt").expect("written");
        let options = Options { link: link.clone(), pace: false };
        assert!(matches!(SimulatedReceiver::start(scene(), options), Err(SceneError::Taken(_))));
        assert_eq!(std::fs::read_to_string(&link).expect("still there"), "dear aunt");
    }

    #[test]
    fn what_came_there_later_is_left_alone_too() {
        let folder = tempfile::tempdir().expect("a folder");
        let link = folder.path().join("rx1");
        let receiver = SimulatedReceiver::start(scene(), Options { link: link.clone(), pace: false }).expect("in");
        std::fs::remove_file(&link).expect("the link goes");
        std::fs::write(&link, "dear aunt").expect("written");
        drop(receiver);
        assert_eq!(std::fs::read_to_string(&link).expect("still there"), "dear aunt");
    }

    #[test]
    fn unplugged_and_plugged_in_again_under_the_same_name() {
        let folder = tempfile::tempdir().expect("a folder");
        let link = folder.path().join("rx1");
        let mut scene = scene();
        let what = hushwatch_config::scene::What::Unplugged { lasts: Span::from_hours(2) };
        scene.events = vec![hushwatch_config::scene::Event { at: Span::from_mins(2), what }];
        let receiver = SimulatedReceiver::start(scene, Options { link: link.clone(), pace: false }).expect("in");
        let before = receiver.plant_time();
        let mut file = File::options().read(true).write(true).open(&link).expect("the port opens");
        file.write_all(b"INIT\n").expect("written");
        let mut byte = [0];
        // Hung up: nothing, or an error, comes at once.
        assert!(!matches!(file.read(&mut byte), Ok(1)));
        while std::fs::symlink_metadata(&link).is_err() {
            std::thread::sleep(Duration::from_millis(20));
        }
        assert_eq!(ask(&link, "*IDN?"), "Simulated,RX-2044,417,1.0");
        assert_eq!(receiver.plant_time() - before, Span::from_mins(123));
    }

    #[test]
    fn bytes_are_paced() {
        let folder = tempfile::tempdir().expect("a folder");
        let link = folder.path().join("rx1");
        let mut scene = scene();
        scene.receiver.baud = 9600;
        let receiver = SimulatedReceiver::start(scene, Options { link, pace: true }).expect("plugged in");
        let begun = Instant::now();
        let trace = ask(receiver.port_path(), "FREQ:STAR 2E6;STOP 1E7;:SWE:POIN 81;:INIT;:TRAC? TRACE1");
        // Ten bits a byte; never faster than the line (slower it may be, on a busy machine).
        let least = Duration::from_secs_f64(trace.len() as f64 * 10.0 / 9600.0 * 0.9);
        assert!(begun.elapsed() >= least, "{:?} instead of {least:?}", begun.elapsed());
    }
}
