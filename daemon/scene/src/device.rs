//! The receiver as its commands show it: a swept receiver after SCPI-1999, pure. Bytes come in, bytes go out, each with
//! the time at which it is due; the clock of the real world comes in as an argument.

use std::collections::VecDeque;
use std::time::Duration;

use hushwatch_config::scene::What;
use hushwatch_quantity::{Span, Time};

use crate::cabinet::{Cabinet, Grid};
use crate::command::{channel, is, is_word, number};

/// The queue of errors holds so many (SCPI-1999 leaves the number open).
const MOST_ERRORS: usize = 16;

/// A line may be so long.
const LONGEST_LINE: usize = 1024;

/// Where it can be tuned to, Hz.
const LOWEST_HZ: f64 = 1e3;

/// Up to where it can be tuned, Hz.
const HIGHEST_HZ: f64 = 1e9;

/// From dBm to dB(uV) in 50 ohm.
const DBM_TO_DBUV: f64 = 106.990;

/// Something that is answered.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Reply {
    /// When it is due, real time.
    pub due: Duration,
    /// The bytes.
    pub bytes: Vec<u8>,
}

/// The receiver is away.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Outage {
    /// It answers nothing.
    Silent(Span),
    /// It is unplugged.
    Unplugged(Span),
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Form {
    Ascii,
    Real32,
}

/// What the receiver is set to.
#[derive(Clone, Debug)]
#[expect(clippy::struct_excessive_bools, reason = "they are the switches of the receiver")]
struct Settings {
    start_hz: f64,
    stop_hz: f64,
    points: usize,
    rbw_hz: f64,
    vbw_hz: f64,
    detector: &'static str,
    sweep_s: f64,
    attenuation_db: f64,
    attenuation_auto: bool,
    dbuv: bool,
    form: Form,
    swapped: bool,
    continuous: bool,
    input: u32,
}

impl Settings {
    /// After `*RST`.
    fn reset() -> Self {
        Self {
            start_hz: 9e3,
            stop_hz: 30e6,
            points: 501,
            rbw_hz: 100e3,
            vbw_hz: 300e3,
            detector: "POS",
            sweep_s: 0.1,
            attenuation_db: 10.0,
            attenuation_auto: true,
            dbuv: false,
            form: Form::Ascii,
            swapped: false,
            continuous: true,
            input: 1,
        }
    }
}

/// A command that is wrong: number and text of SCPI-1999.
type Wrong = (i32, &'static str);

const UNDEFINED: Wrong = (-113, "Undefined header");
const MISSING: Wrong = (-109, "Missing parameter");
const DATA_TYPE: Wrong = (-104, "Data type error");
const OUT_OF_RANGE: Wrong = (-222, "Data out of range");
const ILLEGAL: Wrong = (-224, "Illegal parameter value");
const STALE: Wrong = (-230, "Data corrupt or stale");
const TOO_LONG: Wrong = (-363, "Input buffer overrun");

/// The receiver.
#[derive(Debug)]
pub struct Device {
    cabinet: Cabinet,
    settings: Settings,
    errors: VecDeque<Wrong>,
    line: Vec<u8>,
    overrun: bool,
    trace_dbuv: Vec<f64>,
    /// The plant time that has been skipped or stepped so far; the real clock comes on top if there is no step.
    plant: Time,
    busy_until: Duration,
    /// Which outage of the scene comes next.
    next_event: usize,
    sweeps: u64,
}

impl Device {
    /// The receiver, switched on at the beginning of the scene.
    pub fn new(cabinet: Cabinet) -> Self {
        let plant = cabinet.scene().start;
        Self {
            cabinet,
            settings: Settings::reset(),
            errors: VecDeque::new(),
            line: Vec::new(),
            overrun: false,
            trace_dbuv: Vec::new(),
            plant,
            busy_until: Duration::ZERO,
            next_event: 0,
            sweeps: 0,
        }
    }

    /// The present plant time; `now` is the real time since the start.
    pub fn plant_time(&self, now: Duration) -> Time {
        match self.cabinet.scene().step {
            Some(_) => self.plant,
            None => self.plant + Span::from_secs_f64(now.as_secs_f64()),
        }
    }

    /// Is the scene over?
    pub fn is_over(&self, now: Duration) -> bool {
        let scene = self.cabinet.scene();
        self.plant_time(now) >= scene.start + scene.duration
    }

    /// The outage that has begun, if one has; each is told once.
    pub fn outage(&mut self, now: Duration) -> Option<Outage> {
        let since = self.plant_time(now) - self.cabinet.scene().start;
        while let Some(event) = self.cabinet.scene().events.get(self.next_event) {
            if event.at > since {
                return None;
            }
            self.next_event += 1;
            match event.what {
                What::ReceiverSilent { lasts } => return Some(Outage::Silent(lasts)),
                What::Unplugged { lasts } => return Some(Outage::Unplugged(lasts)),
                _ => {}
            }
        }
        None
    }

    /// Plant time goes on without a sweep.
    pub fn skip(&mut self, span: Span) {
        self.plant = self.plant + span;
    }

    /// Power off and on: everything that was set is forgotten.
    pub fn power_cycle(&mut self) {
        self.settings = Settings::reset();
        self.errors.clear();
        self.line.clear();
        self.overrun = false;
        self.trace_dbuv.clear();
    }

    /// Takes bytes from the line; gives what is to be answered.
    pub fn receive(&mut self, bytes: &[u8], now: Duration) -> Vec<Reply> {
        let mut replies = Vec::new();
        for byte in bytes {
            match byte {
                b'\n' => {
                    let line = std::mem::take(&mut self.line);
                    if std::mem::take(&mut self.overrun) {
                        self.fail(TOO_LONG);
                    } else {
                        replies.extend(self.message(&String::from_utf8_lossy(&line), now));
                    }
                }
                _ if self.line.len() >= LONGEST_LINE => self.overrun = true,
                byte => self.line.push(*byte),
            }
        }
        replies
    }

    /// One program message: commands with semicolons between, all answers in one line.
    fn message(&mut self, line: &str, now: Duration) -> Option<Reply> {
        let mut answers: Vec<Vec<u8>> = Vec::new();
        // A header after a semicolon goes on from the branch of the one before (SCPI-1999, 6.2.4).
        let mut branch = String::new();
        for command in line.split(';').map(str::trim).filter(|command| !command.is_empty()) {
            let (header, parameter) = command.split_once([' ', '\t']).unwrap_or((command, ""));
            let rooted = header.strip_prefix(':').unwrap_or(header);
            let whole = if header.starts_with([':', '*']) || branch.is_empty() {
                rooted.to_owned()
            } else {
                format!("{branch}:{rooted}")
            };
            if !header.starts_with('*') {
                let path = whole.trim_end_matches('?');
                branch = path.rsplit_once(':').map_or(String::new(), |(branch, _)| branch.to_owned());
            }
            match self.command(&whole, parameter.trim(), now) {
                Ok(Some(answer)) => answers.push(answer),
                Ok(None) => {}
                Err(wrong) => self.fail(wrong),
            }
        }
        if answers.is_empty() {
            return None;
        }
        let mut bytes = answers.join(&b';');
        bytes.push(b'\n');
        Some(Reply { due: now.max(self.busy_until), bytes })
    }

    fn fail(&mut self, wrong: Wrong) {
        if self.errors.len() < MOST_ERRORS {
            self.errors.push_back(wrong);
        } else if let Some(last) = self.errors.back_mut() {
            *last = (-350, "Queue overflow");
        }
    }

    fn command(&mut self, header: &str, parameter: &str, now: Duration) -> Result<Option<Vec<u8>>, Wrong> {
        match header.strip_suffix('?') {
            Some(query) => self.query(query, parameter, now).map(Some),
            None => self.set(header, parameter, now).map(|()| None),
        }
    }

    fn query(&mut self, header: &str, parameter: &str, now: Duration) -> Result<Vec<u8>, Wrong> {
        let set = &self.settings;
        let text = if header.eq_ignore_ascii_case("*IDN") {
            self.cabinet.scene().receiver.identity.clone()
        } else if header.eq_ignore_ascii_case("*OPC") {
            String::from("1")
        } else if header.eq_ignore_ascii_case("*ESR") || header.eq_ignore_ascii_case("*STB") {
            String::from("0")
        } else if is("SYSTem:ERRor[:NEXT]", header) {
            let (number, text) = self.errors.pop_front().unwrap_or((0, "No error"));
            format!("{number},\"{text}\"")
        } else if is("SYSTem:CLOCk", header) {
            self.plant_time(now.max(self.busy_until)).to_string()
        } else if is("[SENSe:]FREQuency:STARt", header) {
            format!("{:E}", set.start_hz)
        } else if is("[SENSe:]FREQuency:STOP", header) {
            format!("{:E}", set.stop_hz)
        } else if is("[SENSe:]FREQuency:CENTer", header) {
            format!("{:E}", f64::midpoint(set.start_hz, set.stop_hz))
        } else if is("[SENSe:]FREQuency:SPAN", header) {
            format!("{:E}", set.stop_hz - set.start_hz)
        } else if is("[SENSe:]SWEep:POINts", header) {
            set.points.to_string()
        } else if is("[SENSe:]SWEep:TIME", header) {
            format!("{:E}", set.sweep_s)
        } else if is("[SENSe:]BANDwidth[:RESolution]", header) {
            format!("{:E}", set.rbw_hz)
        } else if is("[SENSe:]BANDwidth:VIDeo", header) {
            format!("{:E}", set.vbw_hz)
        } else if is("[SENSe:]BANDwidth:SHAPe", header) {
            // Named by its 6 dB width; it has no other one.
            String::from("GAUS")
        } else if is("ROUTe:CLOSe", header) {
            format!("(@{})", set.input)
        } else if is("[SENSe:]DETector[:FUNCtion]", header) {
            set.detector.to_owned()
        } else if is("INPut:ATTenuation", header) {
            format!("{}", set.attenuation_db)
        } else if is("INPut:ATTenuation:AUTO", header) {
            u8::from(set.attenuation_auto).to_string()
        } else if is("UNIT:POWer", header) {
            String::from(if set.dbuv { "DBUV" } else { "DBM" })
        } else if is("FORMat[:DATA]", header) {
            String::from(if set.form == Form::Real32 { "REAL,32" } else { "ASC,0" })
        } else if is("FORMat:BORDer", header) {
            String::from(if set.swapped { "SWAP" } else { "NORM" })
        } else if is("INITiate:CONTinuous", header) {
            u8::from(set.continuous).to_string()
        } else if is("TRACe[:DATA]", header) {
            return self.trace(parameter);
        } else {
            return Err(UNDEFINED);
        };
        Ok(text.into_bytes())
    }

    fn set(&mut self, header: &str, parameter: &str, now: Duration) -> Result<(), Wrong> {
        if header.eq_ignore_ascii_case("*RST") {
            self.settings = Settings::reset();
        } else if header.eq_ignore_ascii_case("*CLS") {
            self.errors.clear();
        } else if header.eq_ignore_ascii_case("*WAI") || header.eq_ignore_ascii_case("*OPC") {
        } else if is("INITiate[:IMMediate]", header) {
            self.sweep(now);
        } else if is("INITiate:CONTinuous", header) {
            self.settings.continuous = switch(parameter)?;
        } else if is("ROUTe:CLOSe", header) {
            self.settings.input = channel(parameter).filter(|input| *input > 0).ok_or(ILLEGAL)?;
        } else if is("FORMat[:DATA]", header) {
            self.set_form(parameter)?;
        } else if is("FORMat:BORDer", header) {
            self.settings.swapped = choice(parameter, &[("NORMal", false), ("SWAPped", true)])?;
        } else if is("UNIT:POWer", header) {
            self.settings.dbuv = choice(parameter, &[("DBM", false), ("DBUV", true)])?;
        } else if is("[SENSe:]DETector[:FUNCtion]", header) {
            let words = [("RMS", "RMS"), ("AVERage", "AVER"), ("POSitive", "POS"), ("QPEak", "QPE"), ("CRMS", "CRMS")];
            self.settings.detector = choice(parameter, &words)?;
        } else if is("INPut:ATTenuation:AUTO", header) {
            self.settings.attenuation_auto = switch(parameter)?;
        } else {
            self.set_number(header, parameter)?;
        }
        Ok(())
    }

    fn set_form(&mut self, parameter: &str) -> Result<(), Wrong> {
        let (word, length) = parameter.split_once(',').unwrap_or((parameter, ""));
        self.settings.form = match (word.trim(), length.trim()) {
            ("", _) => return Err(MISSING),
            (word, _) if is_word("ASCii", word) => Form::Ascii,
            (word, "32") if is_word("REAL", word) => Form::Real32,
            _ => return Err(ILLEGAL),
        };
        Ok(())
    }

    fn set_number(&mut self, header: &str, parameter: &str) -> Result<(), Wrong> {
        let most_points = self.cabinet.scene().receiver.max_points as usize;
        let set = &mut self.settings;
        // Each with its limits.
        let (place, low, high): (&mut f64, f64, f64) = if is("[SENSe:]FREQuency:STARt", header) {
            (&mut set.start_hz, LOWEST_HZ, HIGHEST_HZ)
        } else if is("[SENSe:]FREQuency:STOP", header) {
            (&mut set.stop_hz, LOWEST_HZ, HIGHEST_HZ)
        } else if is("[SENSe:]BANDwidth[:RESolution]", header) {
            (&mut set.rbw_hz, 10.0, 10e6)
        } else if is("[SENSe:]BANDwidth:VIDeo", header) {
            (&mut set.vbw_hz, 1.0, 100e6)
        } else if is("[SENSe:]SWEep:TIME", header) {
            (&mut set.sweep_s, 1e-6, 1e5)
        } else if is("INPut:ATTenuation", header) {
            set.attenuation_auto = false;
            (&mut set.attenuation_db, 0.0, 70.0)
        } else if is("[SENSe:]SWEep:POINts", header) {
            let points = number_of(parameter)?;
            set.points = (points.clamp(2.0, most_points as f64)) as usize;
            return Ok(());
        } else if is("[SENSe:]FREQuency:CENTer", header) || is("[SENSe:]FREQuency:SPAN", header) {
            let value = number_of(parameter)?;
            let (center, span) = (f64::midpoint(set.start_hz, set.stop_hz), set.stop_hz - set.start_hz);
            let of_span = is("[SENSe:]FREQuency:SPAN", header);
            let (center, span) = if of_span { (center, value) } else { (value, span) };
            let (start, stop) = (center - span / 2.0, center + span / 2.0);
            if span < 0.0 || start < LOWEST_HZ || stop > HIGHEST_HZ {
                return Err(OUT_OF_RANGE);
            }
            (set.start_hz, set.stop_hz) = (start, stop);
            return Ok(());
        } else {
            return Err(UNDEFINED);
        };
        let value = number_of(parameter)?;
        if !(low..=high).contains(&value) {
            return Err(OUT_OF_RANGE);
        }
        *place = value;
        // The one that was not set gives way (SCPI-1999, 18.8).
        if set.stop_hz < set.start_hz {
            if is("[SENSe:]FREQuency:STARt", header) {
                set.stop_hz = set.start_hz;
            } else {
                set.start_hz = set.stop_hz;
            }
        }
        Ok(())
    }

    fn sweep(&mut self, now: Duration) {
        match self.cabinet.scene().step {
            Some(step) => {
                self.plant = self.plant + step;
                self.busy_until = now;
            }
            None => self.busy_until = now + Duration::from_secs_f64(self.settings.sweep_s),
        }
        let set = &self.settings;
        let grid = Grid {
            start_hz: set.start_hz,
            stop_hz: set.stop_hz,
            points: set.points,
            rbw_hz: set.rbw_hz,
            attenuation_db: if set.attenuation_auto { 10.0 } else { set.attenuation_db },
        };
        let (input, time) = (set.input, self.plant_time(now));
        self.trace_dbuv = self.cabinet.sweep(input, &grid, time);
        self.sweeps += 1;
    }

    fn trace(&self, parameter: &str) -> Result<Vec<u8>, Wrong> {
        if parameter.is_empty() {
            return Err(MISSING);
        }
        if !parameter.eq_ignore_ascii_case("TRACE1") {
            return Err(ILLEGAL);
        }
        if self.trace_dbuv.is_empty() {
            return Err(STALE);
        }
        let shift = if self.settings.dbuv { 0.0 } else { DBM_TO_DBUV };
        let values = self.trace_dbuv.iter().map(|dbuv| dbuv - shift);
        Ok(match self.settings.form {
            Form::Ascii => values.map(|value| format!("{value:.3}")).collect::<Vec<_>>().join(",").into_bytes(),
            Form::Real32 => {
                let bytes: Vec<u8> = values
                    .map(|value| value as f32)
                    .flat_map(|value| if self.settings.swapped { value.to_le_bytes() } else { value.to_be_bytes() })
                    .collect();
                let length = bytes.len().to_string();
                let mut block = format!("#{}{length}", length.len()).into_bytes();
                block.extend(bytes);
                block
            }
        })
    }
}

fn number_of(parameter: &str) -> Result<f64, Wrong> {
    if parameter.is_empty() { Err(MISSING) } else { number(parameter).ok_or(DATA_TYPE) }
}

fn switch(parameter: &str) -> Result<bool, Wrong> {
    choice(parameter, &[("ON", true), ("OFF", false), ("1", true), ("0", false)])
}

fn choice<T: Copy>(parameter: &str, words: &[(&str, T)]) -> Result<T, Wrong> {
    if parameter.is_empty() {
        return Err(MISSING);
    }
    words.iter().find(|(word, _)| is_word(word, parameter)).map(|(_, value)| *value).ok_or(ILLEGAL)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::cabinet::tests::scene;

    fn device() -> Device {
        Device::new(Cabinet::new(scene()))
    }

    fn ask(device: &mut Device, line: &str) -> String {
        let replies = device.receive(format!("{line}\n").as_bytes(), Duration::ZERO);
        replies.iter().map(|reply| String::from_utf8_lossy(&reply.bytes).trim_end().to_owned()).collect()
    }

    #[test]
    fn a_conversation() {
        let mut device = device();
        for (line, answer) in [
            ("*IDN?", "Simulated,RX-2044,417,1.0"),
            ("*CLS", ""),
            ("FREQ:STAR 2E6;STOP 10 MHZ", ""),
            ("FREQ:STAR?;STOP?", "2E6;1E7"),
            (":sens:sweep:points 81;:BAND 100 kHz;BAND:VID 300000", ""),
            ("SWE:POIN?", "81"),
            ("BAND?;*OPC?", "1E5;1"),
            ("DET RMS;DET?", "RMS"),
            ("SWE:POIN 100000;POIN?", "1001"),
            ("INP:ATT 10;ATT?;ATT:AUTO?", "10;0"),
            ("UNIT:POW DBUV;POW?", "DBUV"),
            ("ROUT:CLOS (@2);CLOS?", "(@2)"),
            ("BAND:SHAP?", "GAUS"),
            ("FREQ:CENT 5 MHZ;SPAN 2E6;STAR?;STOP?", "4E6;6E6"),
            ("sense:frequency:center?;span?", "5E6;2E6"),
            ("FORM ASC;FORM?", "ASC,0"),
            ("SYST:ERR?", "0,\"No error\""),
            ("FREQ:STAR", ""),
            ("FREQ:STAR abc", ""),
            ("FREQ:STAR 1E12", ""),
            ("FROB:NICATE 3", ""),
            ("TRAC? TRACE9", ""),
            ("FREQ:SPAN 1E8", ""),
            ("TRAC? TRACE1", ""),
            ("SYST:ERR?", "-109,\"Missing parameter\""),
            ("SYST:ERR?", "-104,\"Data type error\""),
            ("SYST:ERR?", "-222,\"Data out of range\""),
            ("SYSTEM:ERROR:NEXT?", "-113,\"Undefined header\""),
            ("SYST:ERR?", "-224,\"Illegal parameter value\""),
            ("SYST:ERR?", "-222,\"Data out of range\""),
            ("SYST:ERR?", "-230,\"Data corrupt or stale\""),
            ("SYST:ERR?", "0,\"No error\""),
        ] {
            assert_eq!(ask(&mut device, line), answer, "{line}");
        }
    }

    #[test]
    fn a_trace_in_both_forms_is_the_same_and_time_goes_on_with_it() {
        let mut device = device();
        ask(&mut device, "FREQ:STAR 2E6;STOP 1E7;:SWE:POIN 81;:BAND 1E5;:FORM ASC;:INIT:CONT OFF");
        let before = ask(&mut device, "SYST:CLOC?");
        let text = ask(&mut device, "INIT;*OPC?;:TRAC? TRACE1");
        let values: Vec<f64> =
            text.strip_prefix("1;").expect("done").split(',').map(|v| v.parse().expect("a number")).collect();
        assert_eq!(values.len(), 81);
        ask(&mut device, "FORM REAL,32");
        let reply = device.receive(b"TRAC? TRACE1\n", Duration::ZERO).remove(0).bytes;
        assert!(reply.starts_with(b"#3324") && reply.len() == 5 + 324 + 1 && reply.ends_with(b"\n"));
        for (bytes, value) in reply[5..329].chunks(4).zip(&values) {
            let block = f32::from_be_bytes(bytes.try_into().expect("four bytes"));
            assert!((f64::from(block) - value).abs() < 1e-3);
        }
        let after = ask(&mut device, "SYST:CLOC?");
        let time = |text: &str| Time::parse_rfc3339(text).expect(text);
        assert_eq!(time(&after) - time(&before), Span::from_mins(3));
    }

    #[test]
    fn bytes_may_come_in_any_pieces_and_too_many_are_refused() {
        let mut device = device();
        assert_eq!(device.receive(b"*ID", Duration::ZERO), []);
        assert_eq!(device.receive(b"N?\r\n", Duration::ZERO).len(), 1);
        device.receive(&[b'x'; 5000], Duration::ZERO);
        device.receive(b"\n", Duration::ZERO);
        assert_eq!(ask(&mut device, "SYST:ERR?"), "-363,\"Input buffer overrun\"");
        for _ in 0..40 {
            ask(&mut device, "NONSENSE");
        }
        let errors: Vec<String> = (0..17).map(|_| ask(&mut device, "SYST:ERR?")).collect();
        assert!(errors[15].starts_with("-350") && errors[16].starts_with("0,"), "{errors:?}");
    }

    #[test]
    fn with_the_real_clock_a_sweep_takes_its_time() {
        let mut scene = scene();
        scene.step = None;
        let mut device = Device::new(Cabinet::new(scene));
        let now = Duration::from_secs(100);
        device.receive(b"SWE:TIME 0.5;:INIT\n", now);
        let reply = device.receive(b"*OPC?\n", now).remove(0);
        assert_eq!(reply.due, now + Duration::from_millis(500));
    }
}
