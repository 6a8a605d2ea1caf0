//! One cabinet of a test: a folder with a site file, the device on its terminal, the service, the companion.

use std::path::{Path, PathBuf};
use std::process::{Child, Command, Output, Stdio};
use std::time::{Duration, Instant};

use serde_json::Value;
use tempfile::TempDir;

use crate::device::{Device, Knobs};
use crate::programs::{program, told};

/// The level per point at which all inputs of the device start, dBm.
pub const QUIET_DBM: f64 = -60.0;

/// A cabinet with two cables, W12 on input 1 and W14 on input 2, and a band from 2 to 10 MHz.
pub struct Plant {
    folder: TempDir,
    /// The device that stands in for the receiver.
    pub device: Device,
    service: Option<Child>,
}

impl Plant {
    /// A cabinet whose service does not run yet. `more` is appended to the site file.
    ///
    /// # Panics
    /// The folder cannot be written.
    pub fn new(more: &str) -> Self {
        Self::with_knobs(more, Knobs::default())
    }

    /// The same with a device of other abilities; what is not told of it is filled in.
    ///
    /// # Panics
    /// The folder cannot be written.
    pub fn with_knobs(more: &str, mut knobs: Knobs) -> Self {
        let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
        if knobs.most_points == 0 {
            knobs.most_points = 1001;
        }
        if knobs.identity.is_empty() {
            "Test bench,RX-1,7,1.0".clone_into(&mut knobs.identity);
        }
        for input in [1, 2] {
            knobs.dbm.entry(input).or_insert(QUIET_DBM);
        }
        let device = Device::plug_in(&folder.path().join("rx1"), knobs);
        std::fs::write(folder.path().join("site.toml"), format!("{SITE}\n{more}")).expect("a site file");
        Self { folder, device, service: None }
    }

    /// The folder with everything in it.
    pub fn folder(&self) -> &Path {
        self.folder.path()
    }

    /// The site file.
    pub fn site(&self) -> PathBuf {
        self.folder().join("site.toml")
    }

    /// Starts the service and waits until it has recorded a level of each cable that was not there before.
    ///
    /// # Panics
    /// No level comes.
    pub fn start(&mut self) {
        let before = self.count("SELECT count(*) FROM levels");
        self.start_only();
        self.wait_for("the first levels", |plant| plant.count("SELECT count(*) FROM levels") >= before + 2);
    }

    /// Starts the service.
    ///
    /// # Panics
    /// It does not start.
    pub fn start_only(&mut self) {
        self.start_with(&[]);
    }

    /// Starts the service with more in its environment.
    ///
    /// # Panics
    /// It does not start.
    pub fn start_with(&mut self, environment: &[(&str, &str)]) {
        let log = std::fs::OpenOptions::new().create(true).append(true).open(self.folder().join("service.log"));
        let child = Command::new(program("hushwatchd"))
            .arg("--site")
            .arg(self.site())
            .envs(environment.iter().copied())
            .stdin(Stdio::null())
            .stderr(log.expect("a log"))
            .spawn()
            .expect("the service starts");
        self.service = Some(child);
    }

    /// Asks the service to stop in order; how it ended.
    ///
    /// # Panics
    /// It does not run, or does not stop within 10 s.
    pub fn stop(&mut self) -> std::process::ExitStatus {
        self.signal("TERM");
        let mut child = self.service.take().expect("the service runs");
        let begun = Instant::now();
        loop {
            if let Some(status) = child.try_wait().expect("its state") {
                return status;
            }
            assert!(begun.elapsed() < Duration::from_secs(10), "the service does not stop:\n{}", self.log());
            std::thread::sleep(Duration::from_millis(20));
        }
    }

    /// `kill -9`, at whatever it is doing.
    ///
    /// # Panics
    /// It does not run.
    pub fn kill(&mut self) {
        let mut child = self.service.take().expect("the service runs");
        child.kill().expect("killed");
        child.wait().expect("gone");
    }

    /// Sends the service a signal.
    pub fn signal(&self, name: &str) {
        let child = self.service.as_ref().expect("the service runs");
        let status =
            Command::new("kill").arg(format!("-{name}")).arg(child.id().to_string()).status().expect("kill runs");
        assert!(status.success(), "the service is gone already:\n{}", self.log());
    }

    /// Runs the companion.
    ///
    /// # Panics
    /// It does not start.
    pub fn hushwatch(&self, arguments: &[&str]) -> Output {
        Command::new(program("hushwatch"))
            .args(arguments)
            .env("HUSHWATCH_SITE", self.site())
            .env("NO_COLOR", "1")
            .stdin(Stdio::null())
            .output()
            .expect("the companion starts")
    }

    /// Runs the companion, which must end with `code`; what it wrote.
    ///
    /// # Panics
    /// It ends with another code.
    pub fn ask(&self, arguments: &[&str], code: i32) -> String {
        let output = self.hushwatch(arguments);
        assert_eq!(output.status.code(), Some(code), "{arguments:?}: {}\n--- log\n{}", told(&output), self.log());
        String::from_utf8(output.stdout).expect("UTF-8")
    }

    /// A number from the record, read by the plain `sqlite3`; 0 if there is no record yet.
    ///
    /// # Panics
    /// The answer is no number.
    pub fn count(&self, sql: &str) -> i64 {
        self.sql(sql).map_or(0, |text| text.trim().parse().unwrap_or_else(|_| panic!("`{sql}` gives {text}")))
    }

    /// What plain SQLite reads from the record: a line for each row, `|` between the columns; `None` if there is no record
    /// (yet), or not all of it.
    ///
    /// # Panics
    /// The record is no database.
    pub fn sql(&self, sql: &str) -> Option<String> {
        let record = self.folder().join("e14.db");
        if !record.exists() {
            return None;
        }
        crate::sqlite::query(&record, sql).ok()
    }

    /// The open alarms, as the companion tells them.
    ///
    /// # Panics
    /// It does not tell.
    pub fn alarms(&self) -> Vec<Value> {
        let text = self.ask(&["alarms", "--json"], 0);
        text.lines().map(|line| serde_json::from_str(line).unwrap_or_else(|error| panic!("{error}: {line}"))).collect()
    }

    /// Waits until something holds, 90 s at most: a busy machine is slow, and no time limit decides a test.
    ///
    /// # Panics
    /// It does not come to hold.
    pub fn wait_for(&self, what: &str, holds: impl Fn(&Self) -> bool) {
        let begun = Instant::now();
        while !holds(self) {
            assert!(
                begun.elapsed() < Duration::from_secs(90),
                "waited in vain for {what}\n--- heard by the device\n{:?}\n--- log\n{}",
                self.device.turn().heard,
                self.log()
            );
            std::thread::sleep(Duration::from_millis(50));
        }
    }

    /// What the service has logged.
    pub fn log(&self) -> String {
        std::fs::read_to_string(self.folder().join("service.log")).unwrap_or_default()
    }
}

impl Drop for Plant {
    fn drop(&mut self) {
        if let Some(mut child) = self.service.take() {
            let _ = child.kill();
            let _ = child.wait();
        }
    }
}

const SITE: &str = r#"format = 1

[site]
name = "Bottling hall 2, cabinet E14"
timezone = "Europe/Vienna"

[record]
path = "e14.db"
commit_every = "200 ms"

[[instrument]]
name = "rx1"
port = "rx1"
dialect = "scpi-swept"
baud = 3000000
timeout = "1 s"
dwell = "0.1 ms"

[[probe]]
name = "clamp-a"
kind = "current-probe"
factor = [["150 kHz", 2.0], ["2 MHz", 12.0], ["30 MHz", 14.0]]
path_loss = [["150 kHz", 0.1], ["30 MHz", 0.8]]

[[band]]
name = "ringing"
from = "2 MHz"
to = "10 MHz"
rbw = "100 kHz"

[[cable]]
tag = "W12"
input = 1
probe = "clamp-a"
loop = { source = "25 ohm", load = "25 ohm" }
every = "50 ms"

[[cable]]
tag = "W14"
input = 2
probe = "clamp-a"
loop = { source = "25 ohm", load = "25 ohm" }
every = "50 ms"

[drift]
block = "1 s"
"#;
