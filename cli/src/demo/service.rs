//! The service as a program of its own.

use std::fs::File;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant};

use crate::failure::Failure;

/// How long it may take to stop in order.
const PATIENCE: Duration = Duration::from_secs(5);

/// The service; it is stopped when this is dropped.
#[derive(Debug)]
pub(super) struct Service {
    child: Child,
    log: PathBuf,
}

impl Service {
    /// Starts the service on the site file in a folder; its log goes there too.
    pub(super) fn start(folder: &Path) -> Result<Self, Failure> {
        let own = std::env::current_exe()?;
        let program = own.with_file_name("hushwatchd");
        if !program.exists() {
            return Err(Failure::could_not(format!(
                "the service {} is not there: build it with `cargo build --release --bins`",
                program.display()
            )));
        }
        let log = folder.join("service.log");
        let child = Command::new(program)
            .arg("--site")
            .arg(folder.join("site.toml"))
            .stdin(Stdio::null())
            .stdout(Stdio::null())
            .stderr(File::create(&log)?)
            .spawn()?;
        Ok(Self { child, log })
    }

    /// Where it logs.
    pub(super) fn log(&self) -> &Path {
        &self.log
    }

    /// Fails if it has ended by itself, with the end of its log.
    pub(super) fn still_runs(&mut self) -> Result<(), Failure> {
        let Some(status) = self.child.try_wait()? else { return Ok(()) };
        let log = std::fs::read_to_string(&self.log).unwrap_or_default();
        let end: Vec<&str> = log.lines().rev().take(5).collect();
        let end: Vec<&str> = end.into_iter().rev().collect();
        Err(Failure::could_not(format!("the service ended ({status}):\n{}", end.join("\n"))))
    }

    /// Stops it in order.
    pub(super) fn stop(&mut self) -> Result<(), Failure> {
        self.ask_to_stop();
        let begun = Instant::now();
        while begun.elapsed() < PATIENCE {
            if let Some(status) = self.child.try_wait()? {
                if status.success() {
                    return Ok(());
                }
                return Err(Failure::could_not(format!("the service did not stop in order: {status}")));
            }
            std::thread::sleep(Duration::from_millis(20));
        }
        Err(Failure::could_not("the service does not stop"))
    }

    fn ask_to_stop(&self) {
        let id = i32::try_from(self.child.id()).ok().and_then(rustix::process::Pid::from_raw);
        if let Some(id) = id {
            // It may have ended in this moment.
            let _ = rustix::process::kill_process(id, rustix::process::Signal::TERM);
        }
    }
}

impl Drop for Service {
    fn drop(&mut self) {
        if matches!(self.child.try_wait(), Ok(None)) {
            self.ask_to_stop();
            std::thread::sleep(Duration::from_millis(200));
            let _ = self.child.kill();
            let _ = self.child.wait();
        }
    }
}
