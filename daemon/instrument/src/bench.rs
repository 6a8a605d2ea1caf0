//! A swept receiver for the tests of this room, as a pure function of the lines it hears. It can lack commands, be
//! silent, and tell nonsense.

use std::collections::{BTreeMap, VecDeque};

use hushwatch_quantity::{Detector, FilterShape};

use crate::plan::{Segment, SweepPlan};

pub(crate) const IDENTITY: &str = "Bench,RX-0,1,1.0";

/// What it does besides what it should.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub(crate) enum Manner {
    #[default]
    Healthy,
    Silent,
    HangsInTrace,
    Garbles,
}

pub(crate) struct Bench {
    pub(crate) settings: BTreeMap<String, String>,
    /// Headers that it does not know, neither as command nor as query.
    pub(crate) lacks: Vec<&'static str>,
    /// Queries that it does not know, without their question mark.
    pub(crate) lacks_query: Vec<&'static str>,
    /// Queries to which it keeps silent, without telling an error.
    pub(crate) mute: Vec<&'static str>,
    /// Settings that it takes and does not heed.
    pub(crate) stuck: Vec<&'static str>,
    /// Answered wherever they are asked.
    pub(crate) answers: BTreeMap<&'static str, &'static str>,
    /// Errors that a command brings, once each.
    pub(crate) brings: Vec<(&'static str, &'static str)>,
    /// What happens to a setting during the next sweeps.
    pub(crate) turned: VecDeque<(&'static str, &'static str)>,
    pub(crate) no_real: bool,
    pub(crate) little: bool,
    pub(crate) most_points: usize,
    pub(crate) identity: String,
    pub(crate) level: f32,
    /// Points that the trace lacks.
    pub(crate) short_by: usize,
    pub(crate) manner: Manner,
    pub(crate) errors: VecDeque<String>,
    /// All it has heard.
    pub(crate) heard: Vec<String>,
    /// Points of the last sweep.
    pub(crate) swept: usize,
}

impl Default for Bench {
    fn default() -> Self {
        let reset = [
            ("FREQ:STAR", "1000"),
            ("FREQ:STOP", "1000000"),
            ("SWE:POIN", "501"),
            ("BAND", "1000"),
            ("BAND:VID", "1000"),
            ("DET", "POS"),
            ("SWE:TIME", "0.001"),
            ("INP:ATT", "10"),
            ("INP:ATT:AUTO", "ON"),
            ("UNIT:POW", "DBUV"),
            ("FORM", "ASC,0"),
            ("FORM:BORD", "NORM"),
            ("INIT:CONT", "ON"),
            ("ROUT:CLOS", ""),
        ];
        Self {
            settings: reset.into_iter().map(|(name, value)| (name.to_owned(), value.to_owned())).collect(),
            lacks: Vec::new(),
            lacks_query: Vec::new(),
            mute: Vec::new(),
            stuck: Vec::new(),
            answers: BTreeMap::new(),
            brings: Vec::new(),
            turned: VecDeque::new(),
            no_real: false,
            little: false,
            most_points: 100_000,
            identity: IDENTITY.to_owned(),
            level: -73.5,
            short_by: 0,
            manner: Manner::Healthy,
            errors: VecDeque::new(),
            heard: Vec::new(),
            swept: 0,
        }
    }
}

impl Bench {
    /// A device with the few commands that any must have; -113 to all others.
    pub(crate) fn sparse() -> Self {
        Self {
            lacks: vec!["BAND:VID", "DET", "SWE:TIME", "INP:ATT", "INP:ATT:AUTO", "UNIT:POW", "FORM:BORD"],
            lacks_query: vec!["FORM"],
            ..Self::default()
        }
    }

    /// Hears a line; its answer, with line end, if it gives one.
    pub(crate) fn hear(&mut self, line: &str) -> Option<Vec<u8>> {
        self.heard.push(line.to_owned());
        if self.manner == Manner::Silent {
            return None;
        }
        let mut answer = self.obey(line)?;
        answer.push(b'\n');
        match self.manner {
            Manner::HangsInTrace if line.starts_with("TRAC") => answer.truncate(answer.len() / 2),
            Manner::Garbles => answer.splice(0..0, *b"\x00\xff#9garbage 9.91E37,\n").for_each(drop),
            _ => {}
        }
        Some(answer)
    }

    fn obey(&mut self, line: &str) -> Option<Vec<u8>> {
        let (header, argument) = line.split_once(' ').unwrap_or((line, ""));
        let name = header.trim_end_matches('?');
        let query = header.ends_with('?');
        if let Some(at) = self.brings.iter().position(|(command, _)| *command == line) {
            self.errors.push_back(self.brings.remove(at).1.to_owned());
            return None;
        }
        if query && self.mute.contains(&name) {
            return None;
        }
        if let Some(answer) = self.answers.get(header) {
            return Some(answer.as_bytes().to_vec());
        }
        match header {
            "*IDN?" => return Some(self.identity.clone().into_bytes()),
            "*CLS" => self.errors.clear(),
            "*OPC?" => return Some(b"1".to_vec()),
            "SYST:ERR?" => {
                let entry = self.errors.pop_front().unwrap_or_else(|| "0,\"No error\"".to_owned());
                return Some(entry.into_bytes());
            }
            "INIT" => self.sweep(),
            "TRAC?" => return Some(self.trace()),
            _ if self.lacks.contains(&name) || (query && self.lacks_query.contains(&name)) => self.undefined(),
            _ if !self.settings.contains_key(name) => self.undefined(),
            _ if query => return Some(self.settings[name].clone().into_bytes()),
            _ => self.set(name, argument),
        }
        None
    }

    fn undefined(&mut self) {
        self.errors.push_back("-113,\"Undefined header\"".to_owned());
    }

    fn set(&mut self, name: &str, argument: &str) {
        let value = match name {
            _ if self.stuck.contains(&name) => return,
            "FORM" if self.no_real && argument.starts_with("REAL") => {
                return self.errors.push_back("-224,\"Illegal parameter value\"".to_owned());
            }
            "FORM:BORD" if self.little => "SWAP".to_owned(),
            "SWE:POIN" => argument.parse::<usize>().expect("a number of points").min(self.most_points).to_string(),
            _ => argument.to_owned(),
        };
        self.settings.insert(name.to_owned(), value);
    }

    fn sweep(&mut self) {
        self.swept = self.settings["SWE:POIN"].parse().expect("a number of points");
        if let Some((name, value)) = self.turned.pop_front() {
            self.settings.insert(name.to_owned(), value.to_owned());
        }
    }

    /// Flat but for its first two points, which were not measured.
    fn trace(&self) -> Vec<u8> {
        let points = self.swept.saturating_sub(self.short_by);
        let levels = (0..points).map(|point| if point < 2 { 9.91e37 } else { self.level });
        if !self.settings["FORM"].starts_with("REAL") {
            return levels.map(|level| format!("{level:E}")).collect::<Vec<_>>().join(",").into_bytes();
        }
        let bytes = |level: f32| if self.little { level.to_le_bytes() } else { level.to_be_bytes() };
        let payload: Vec<u8> = levels.flat_map(bytes).collect();
        let length = payload.len().to_string();
        [format!("#{}{length}", length.len()).into_bytes(), payload].concat()
    }

    /// Is this the trace that it would send?
    pub(crate) fn sent(&self, levels: &[f64]) -> bool {
        levels.len() > 2
            && levels[..2].iter().all(|level| level.is_nan())
            && levels[2..].iter().all(|level| *level == f64::from(self.level))
    }
}

/// One segment of so many points at input 1, with a dwell of 0.1 ms.
pub(crate) fn plan(points: u32) -> SweepPlan {
    SweepPlan { input: 1, segments: vec![segment(150_000.0, 450_000.0, points)], settle: core::time::Duration::ZERO }
}

pub(crate) fn segment(start_hz: f64, stop_hz: f64, points: u32) -> Segment {
    Segment {
        start_hz,
        stop_hz,
        points,
        rbw_hz: 9000.0,
        shape: FilterShape::Gaussian6dB,
        vbw_hz: Some(27000.0),
        detector: Detector::Rms,
        dwell_s: 1e-4,
    }
}
