//! A small swept receiver on a pseudo-terminal, written from SCPI-1999 for these tests alone: it shares no line with
//! the simulated receiver, and it can misbehave.
//!
//! It knows the commands that such a device must have and answers -113 to everything else. Each input carries flat
//! noise of a stated power per point, so the true level of a band is one line of arithmetic.

use std::collections::{BTreeMap, VecDeque};
use std::fs::File;
use std::io::{Read, Write};
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, MutexGuard};
use std::thread::JoinHandle;

use rustix::event::{PollFd, PollFlags, Timespec, poll};

use crate::terminal::Terminal;

/// How the device behaves from the next command on.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Manner {
    /// As it should.
    #[default]
    Healthy,
    /// It answers nothing.
    Silent,
    /// Every trace stops in the middle.
    HangsInAnswer,
    /// It sends nonsense before each answer.
    Garbles,
}

/// What can be turned on the device while it runs.
#[derive(Debug, Default)]
pub struct Knobs {
    /// dBm in each point of an input's trace.
    pub dbm: BTreeMap<u32, f64>,
    /// How it behaves.
    pub manner: Manner,
    /// Settings that it lacks: their commands and queries are unknown to it.
    pub lacks: Vec<&'static str>,
    /// The most points it can sweep.
    pub most_points: usize,
    /// What `*IDN?` says.
    pub identity: String,
    /// Set to make it leave: the terminal is closed.
    pub unplugged: bool,
    /// How many traces it has sent.
    pub traces: u64,
    /// Each command that it has got, for the message of a failed test.
    pub heard: VecDeque<String>,
}

/// The device while it is plugged in.
pub struct Device {
    /// Its knobs; shared with its thread.
    pub knobs: Arc<Mutex<Knobs>>,
    link: PathBuf,
    thread: Option<JoinHandle<()>>,
}

impl Device {
    /// A device whose port is found under `link`.
    ///
    /// # Panics
    /// There is no pseudo-terminal to be had.
    pub fn plug_in(link: &Path, knobs: Knobs) -> Self {
        let mut device = Self { knobs: Arc::new(Mutex::new(knobs)), link: link.to_owned(), thread: None };
        device.replug();
        device
    }

    /// The knobs, to turn or to read.
    ///
    /// # Panics
    /// The device's thread panicked.
    pub fn turn(&self) -> MutexGuard<'_, Knobs> {
        self.knobs.lock().expect("the device runs")
    }

    /// Pulls the plug: the terminal hangs up and the path is gone.
    pub fn unplug(&mut self) {
        self.turn().unplugged = true;
        if let Some(thread) = self.thread.take() {
            thread.join().expect("the device ends in order");
        }
        let _ = std::fs::remove_file(&self.link);
    }

    /// Plugs it in again: a new terminal under the old path.
    ///
    /// # Panics
    /// There is no pseudo-terminal to be had.
    pub fn replug(&mut self) {
        self.turn().unplugged = false;
        let Terminal { master, slave } = Terminal::at(&self.link);
        let knobs = Arc::clone(&self.knobs);
        self.thread = Some(std::thread::spawn(move || {
            let _slave = slave;
            Conversation::new(master, knobs).run();
        }));
    }
}

impl Drop for Device {
    fn drop(&mut self) {
        if self.thread.is_some() {
            self.unplug();
        }
    }
}

struct Conversation {
    port: File,
    knobs: Arc<Mutex<Knobs>>,
    settings: BTreeMap<&'static str, String>,
    errors: VecDeque<&'static str>,
    trace: Vec<f32>,
    noise: u64,
}

/// Settings as this device names them, with their values after a reset.
const SETTINGS: [(&str, &str); 11] = [
    ("FREQ:STAR", "0"),
    ("FREQ:STOP", "30000000"),
    ("SWE:POIN", "201"),
    ("BAND", "10000"),
    ("FORM", "ASC"),
    ("INIT:CONT", "1"),
    ("SWE:TIME", "0.1"),
    ("DET", "POS"),
    ("BAND:VID", "10000"),
    ("INP:ATT", "0"),
    ("UNIT:POW", "DBM"),
];

impl Conversation {
    fn new(port: File, knobs: Arc<Mutex<Knobs>>) -> Self {
        let settings = SETTINGS.iter().map(|(name, value)| (*name, (*value).to_owned())).collect();
        Self { port, knobs, settings, errors: VecDeque::new(), trace: Vec::new(), noise: 0x9e37_79b9_7f4a_7c15 }
    }

    fn run(mut self) {
        let mut line = Vec::new();
        let tick = Timespec { tv_sec: 0, tv_nsec: 20_000_000 };
        loop {
            if self.knobs.lock().expect("knobs").unplugged {
                return;
            }
            let mut ready = [PollFd::new(&self.port, PollFlags::IN)];
            if poll(&mut ready, Some(&tick)).unwrap_or(0) == 0 {
                continue;
            }
            let mut bytes = [0; 512];
            let count = self.port.read(&mut bytes).unwrap_or(0);
            for byte in &bytes[..count] {
                if *byte == b'\n' {
                    let text = String::from_utf8_lossy(&line).trim().to_owned();
                    line.clear();
                    self.hear(&text);
                } else {
                    line.push(*byte);
                }
            }
        }
    }

    fn hear(&mut self, line: &str) {
        let manner = {
            let mut knobs = self.knobs.lock().expect("knobs");
            knobs.heard.push_back(line.to_owned());
            if knobs.heard.len() > 60 {
                knobs.heard.pop_front();
            }
            knobs.manner
        };
        if manner == Manner::Silent || line.is_empty() {
            return;
        }
        if let Some(answer) = self.obey(line) {
            let mut bytes = answer;
            if manner == Manner::Garbles {
                self.say(b"\x00\xff#9garbage 9.91E37,\n");
            }
            if manner == Manner::HangsInAnswer && line.starts_with("TRAC") {
                bytes.truncate(bytes.len() / 2);
                self.say(&bytes);
                return;
            }
            bytes.push(b'\n');
            self.say(&bytes);
        }
    }

    fn say(&mut self, bytes: &[u8]) {
        // A client that reads nothing any more must not hold this device for ever.
        let mut rest = bytes;
        for _ in 0..500 {
            let tick = Timespec { tv_sec: 0, tv_nsec: 10_000_000 };
            let mut ready = [PollFd::new(&self.port, PollFlags::OUT)];
            if poll(&mut ready, Some(&tick)).unwrap_or(0) > 0 {
                match self.port.write(&rest[..rest.len().min(1024)]) {
                    Ok(count) => rest = &rest[count..],
                    Err(_) => return,
                }
            }
            if rest.is_empty() {
                return;
            }
        }
    }

    /// Obeys one command in its long or short form; what it answers, if anything.
    fn obey(&mut self, line: &str) -> Option<Vec<u8>> {
        let (header, argument) = line.split_once(' ').unwrap_or((line, ""));
        let query = header.ends_with('?');
        let header = short_form(header.trim_end_matches('?'));
        let lacks = self.knobs.lock().expect("knobs").lacks.contains(&header.as_str());
        match (header.as_str(), query) {
            ("*IDN", true) => return Some(self.knobs.lock().expect("knobs").identity.clone().into_bytes()),
            ("*CLS", false) => self.errors.clear(),
            ("*WAI", false) => {}
            ("*OPC", true) => return Some(b"1".to_vec()),
            ("SYST:ERR", true) => {
                return Some(self.errors.pop_front().unwrap_or("0,\"No error\"").as_bytes().to_vec());
            }
            ("ROUT:CLOS", false) => {
                let input = argument.trim_start_matches("(@").trim_end_matches(')');
                self.settings.insert("ROUT:CLOS", input.to_owned());
            }
            ("INIT", false) => self.sweep(),
            ("TRAC", true) => return Some(self.trace_bytes()),
            (name, _) if !lacks && SETTINGS.iter().any(|(known, _)| *known == name) => {
                return self.setting(name, query, argument);
            }
            _ => self.errors.push_back("-113,\"Undefined header\""),
        }
        None
    }

    fn setting(&mut self, name: &str, query: bool, argument: &str) -> Option<Vec<u8>> {
        let (name, _) = *SETTINGS.iter().find(|(known, _)| *known == name).expect("asked for by the caller");
        if query {
            return Some(self.settings[name].clone().into_bytes());
        }
        let most = self.knobs.lock().expect("knobs").most_points;
        let value = match name {
            "SWE:POIN" => argument.parse::<usize>().map_or(argument.to_owned(), |points| points.min(most).to_string()),
            "INIT:CONT" => if matches!(argument, "ON" | "1") { "1" } else { "0" }.to_owned(),
            _ => argument.to_owned(),
        };
        self.settings.insert(name, value);
        None
    }

    fn sweep(&mut self) {
        let points = self.settings["SWE:POIN"].parse::<usize>().unwrap_or(201);
        let input = self.settings.get("ROUT:CLOS").and_then(|input| input.parse().ok()).unwrap_or(1);
        let dbm = self.knobs.lock().expect("knobs").dbm.get(&input).copied().unwrap_or(-110.0);
        self.trace = (0..points).map(|_| (dbm + 0.4 * self.unit_noise()) as f32).collect();
    }

    /// About normal, mean 0, variance 1: twelve uniform numbers (xorshift, Marsaglia 2003).
    fn unit_noise(&mut self) -> f64 {
        let mut sum = -6.0;
        for _ in 0..12 {
            self.noise ^= self.noise << 13;
            self.noise ^= self.noise >> 7;
            self.noise ^= self.noise << 17;
            sum += (self.noise >> 11) as f64 / (1u64 << 53) as f64;
        }
        sum
    }

    fn trace_bytes(&self) -> Vec<u8> {
        self.knobs.lock().expect("knobs").traces += 1;
        if self.settings["FORM"].starts_with("REAL") {
            let payload: Vec<u8> = self.trace.iter().flat_map(|value| value.to_be_bytes()).collect();
            let length = payload.len().to_string();
            let mut bytes = format!("#{}{length}", length.len()).into_bytes();
            bytes.extend(payload);
            bytes
        } else {
            self.trace.iter().map(|value| format!("{value:.3}")).collect::<Vec<_>>().join(",").into_bytes()
        }
    }
}

/// The short form of a header with its optional nodes left out, in capitals.
fn short_form(header: &str) -> String {
    let nodes = header.trim_start_matches(':').split(':').map(|node| {
        let node = node.to_ascii_uppercase();
        let keep = if node.len() > 4 && "AEIOU".contains(node.as_bytes()[3] as char) { 3 } else { 4 };
        if node.starts_with('*') || node.len() <= 4 { node } else { node[..keep].to_owned() }
    });
    let nodes: Vec<String> = nodes.collect();
    let optional = ["SENS", "RES", "DATA", "IMM", "NEXT", "FUNC"];
    let kept: Vec<&str> = nodes
        .iter()
        .enumerate()
        .filter(|(place, node)| !(optional.contains(&node.as_str()) && (*place > 0 || nodes.len() > 1)))
        .map(|(_, node)| if node == "BWID" { "BAND" } else { node.as_str() })
        .collect();
    kept.join(":")
}

#[cfg(test)]
mod tests {
    use super::short_form;

    #[test]
    fn long_forms_and_optional_nodes() {
        for (long, short) in [
            (":SENSe:FREQuency:STARt", "FREQ:STAR"),
            ("SENSE:BANDWIDTH:RESOLUTION", "BAND"),
            ("BWIDth:VIDeo", "BAND:VID"),
            ("INITiate:IMMediate", "INIT"),
            ("TRACe:DATA", "TRAC"),
            ("SYSTem:ERRor:NEXT", "SYST:ERR"),
            ("ROUTe:CLOSe", "ROUT:CLOS"),
            ("SWEep:POINts", "SWE:POIN"),
            ("*OPC", "*OPC"),
        ] {
            assert_eq!(short_form(long), short);
        }
    }
}
