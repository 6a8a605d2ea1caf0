//! Right site files, what they mean, and that no file at all brings the reader down.

use std::path::{Path, PathBuf};

use hushwatch_config::dialect::Coding;
use hushwatch_config::faults::{Fault, Severity};
use hushwatch_config::site::{
    self, ChokeMake, Clock, FileReading, Floor, ImpedanceTable, OperatingStates, ProbeKind, RecipientKind, Site,
};
use hushwatch_quantity::{Detector, FilterShape, LevelUnit, ReceiverUnit, Span, Time};
use jiff::civil::{Weekday, date, time};

#[expect(clippy::panic, reason = "a helper of tests")]
fn load(name: &str) -> Site {
    // Tests of a package run in its folder.
    site::load(&Path::new("tests/sites").join(name)).unwrap_or_else(|faults| panic!("{name}: {faults}"))
}

fn text_of(name: &str) -> String {
    std::fs::read_to_string(Path::new("tests/sites").join(name)).unwrap_or_default()
}

fn parse(text: &str) -> Result<Site, String> {
    site::parse(text, Path::new("tests/sites/changed.toml")).map_err(|faults| faults.to_string())
}

#[test]
fn the_smallest_site_file_has_every_default() {
    let site = load("minimal.toml");
    assert_eq!(site.name, "Bottling hall 2, cabinet E14");
    assert_eq!(site.timezone, None);
    assert_eq!(site.record.path, PathBuf::from("/var/lib/hushwatch/bottling-hall-2-cabinet-e14.db"));
    assert_eq!(site.control_socket, PathBuf::from("/var/lib/hushwatch/bottling-hall-2-cabinet-e14.db.sock"));
    assert_eq!(site.record.commit_every, Span::from_secs(10));
    assert_eq!(site.record.keep_levels, Span::from_days(400));
    assert_eq!(site.drift.block, Span::from_mins(10));
    assert_eq!((site.drift.false_alarms_count, site.drift.false_alarms_per), (1.0, Span::from_hours(5 * 8766)));
    assert_eq!(site.operating_states, OperatingStates::Untold);
    assert_eq!(site.scheduled_state(Time::from_secs(0)), Some(OperatingStates::ANY));
    assert!(site.recipients.is_empty() && site.warnings.is_empty(), "{}", site.warnings);

    let [instrument] = &site.instruments[..] else { panic!("one instrument") };
    assert_eq!((instrument.baud, instrument.stop_bits, instrument.dtr_on_open), (115_200, 1, None));
    assert_eq!(
        (instrument.timeout, instrument.dwell, instrument.settle),
        (Span::from_secs(3), Span::from_millis(20), Span::ZERO)
    );
    assert_eq!((instrument.unit, instrument.shape), (ReceiverUnit::Dbm, FilterShape::Gaussian6dB));
    assert_eq!((instrument.format, instrument.clock), (Coding::Real32, Clock::System));
    assert_eq!((instrument.attenuation_db, instrument.floor, instrument.overload_dbuv), (None, None, None));
    assert_eq!(instrument.dialect.name, "scpi-swept");

    let [cable] = &site.cables[..] else { panic!("one cable") };
    assert_eq!((cable.tag.as_str(), cable.input, cable.every), ("W12", 1, None));
    assert_eq!((cable.source_ohm, cable.load_ohm, cable.length_m), (150.0, 150.0, None));
    assert_eq!((cable.probe.name.as_str(), cable.probe.kind), ("W12", ProbeKind::Current));
    assert_eq!(cable.probe.factor, [(150e3, 2.0), (2e6, 12.0), (30e6, 14.0)]);
    assert_eq!(cable.probe.range(), (150e3, 30e6));
    let bands: Vec<_> = cable.bands.iter().map(|band| (band.name.as_str(), band.rbw_hz, band.detector)).collect();
    let rms = Detector::Rms;
    assert_eq!(bands, [("0.15-2MHz", 9e3, rms), ("2-10MHz", 9e3, rms), ("10-30MHz", 9e3, rms)]);
    let choke = cable.choke.as_ref().expect("a choke");
    let table = ImpedanceTable::Magnitude(vec![(1e6, 45.0), (10e6, 170.0), (30e6, 240.0)]);
    assert_eq!((choke.name.as_str(), &choke.make), ("W12", &ChokeMake::Impedance(table)));
}

#[test]
fn the_full_site_file_says_what_it_says() {
    let site = load("full.toml");
    assert!(site.warnings.is_empty(), "{}", site.warnings);
    assert_eq!(site.record.path, PathBuf::from("tests/sites/e14.db"));
    assert_eq!(site.control_socket, PathBuf::from("/run/hushwatch/e14.sock"));
    let instrument = site.instrument(&site.cables[0]).expect("its instrument");
    assert_eq!(instrument.identity.as_deref(), Some("RX-2044"));
    assert_eq!(instrument.attenuation_db, Some(10.0));
    assert_eq!(instrument.floor, Some(Floor::NoiseFigureDb(18.0)));
    // -10 dBm in 50 ohm are 96.99 dB(uV).
    assert!((instrument.overload_dbuv.expect("a level") - 96.9897).abs() < 1e-4);
    let cable = site.cable("W12").expect("the motor cable");
    assert_eq!(cable.probe.kind.unit(), LevelUnit::DbMicroamp);
    assert_eq!(cable.probe.calibrated, Some(date(2026, 3, 1)));
    assert_eq!(cable.bands.len(), 1);
    assert_eq!(cable.bands[0].exclude, [(5.9e6, 6.2e6)]);
    assert_eq!((cable.source_ohm, cable.load_ohm, cable.length_m), (25.0, 25.0, Some(8.0)));
    assert_eq!(
        (cable.min_suppression_db, cable.max_rise_db, cable.every),
        (Some(6.0), Some(3.0), Some(Span::from_secs(10)))
    );
    assert_eq!(cable.witness.as_deref(), Some("W03"));
    let choke = cable.choke.as_ref().expect("a choke");
    assert_eq!(choke.installed, Some(date(2026, 11, 20)));
    let ChokeMake::Cores { core, turns, cores } = &choke.make else { panic!("cores") };
    assert_eq!((core.material.as_str(), core.outer_m, core.inner_m, core.length_m), ("nizn-800", 0.026, 0.013, 0.028));
    assert_eq!((core.split, core.gap_m, *turns, *cores), (true, 0.0, 1, 3));
    assert_eq!(&site.text[core.material_place.clone()], "\"nizn-800\"");
    let RecipientKind::Command { run, timeout } = &site.recipients[0].kind;
    assert_eq!((run.len(), *timeout), (1, Span::from_secs(30)));
}

#[test]
fn the_calendar_is_meant_in_the_zone_of_the_site() {
    let site = load("full.toml");
    // Vienna is an hour ahead of UTC in winter and two in summer: 06:00 there is 05:00Z and 04:00Z.
    for (time, state) in [
        ("2026-11-20T04:59:59Z", "idle"),
        ("2026-11-20T05:00:00Z", "running"),
        ("2026-07-17T04:00:00Z", "running"),
        ("2026-07-17T20:00:00Z", "idle"),
        ("2026-11-21T12:00:00Z", "idle"),
    ] {
        let at = Time::parse_rfc3339(time).expect("a time");
        assert_eq!(site.scheduled_state(at), Some(state), "{time}");
    }
}

#[test]
fn a_calendar_line_may_pass_midnight_and_sunday() {
    let night = "source = \"calendar\"\notherwise = \"day\"\ncalendar = [{ state = \"night\", days = \"Sun,Wed\", from = \"22:00\", to = \"06:00\" }]";
    let site = parse(&format!("{}\n[operating_states]\n{night}", text_of("minimal.toml"))).expect("a site");
    assert_eq!(site.operating_states.names(), ["night", "day"]);
    for (weekday, at, state) in [
        (Weekday::Sunday, time(21, 59, 59, 0), "day"),
        (Weekday::Sunday, time(22, 0, 0, 0), "night"),
        (Weekday::Monday, time(5, 59, 59, 0), "night"),
        (Weekday::Monday, time(6, 0, 0, 0), "day"),
        (Weekday::Monday, time(22, 0, 0, 0), "day"),
        (Weekday::Thursday, time(0, 0, 0, 0), "night"),
    ] {
        assert_eq!(site.operating_states.state_at(weekday, at), Some(state), "{weekday:?} {at}");
    }
}

#[test]
fn a_file_tells_the_state_by_word_or_number() {
    let states = |lines: &str| {
        let site = parse(&format!(
            "{}\n[operating_states]\nsource = \"file\"\npath = \"speed.txt\"\n{lines}",
            text_of("minimal.toml")
        ));
        site.expect("a site").operating_states
    };
    let ranges = states(
        "ranges = [{ state = \"idle\", to = 0.5 }, { state = \"slow\", from = 0.5, to = 10 }, { state = \"fast\", from = 10 }]",
    );
    for (content, state) in [
        ("0\n", "idle"),
        ("-3", "idle"),
        ("9.99 m/s", "slow"),
        ("10", "fast"),
        ("", "unknown"),
        ("NaN", "unknown"),
        ("x", "unknown"),
    ] {
        assert_eq!(ranges.state_in_file(content), Some(state), "{content}");
    }
    let words = states("states = [\"running\", \"idle\"]\notherwise = \"idle\"");
    for (content, state) in [("running\n", "running"), ("stopped", "idle"), ("", "idle")] {
        assert_eq!(words.state_in_file(content), Some(state), "{content}");
    }
    let any = states("");
    assert_eq!(
        any,
        OperatingStates::File {
            path: "tests/sites/speed.txt".into(),
            reading: FileReading::Word(vec![]),
            otherwise: "unknown".into()
        }
    );
    for (content, state) in [("cleaning\r\n", "cleaning"), ("two words", "unknown"), (" ", "unknown")] {
        assert_eq!(any.state_in_file(content), Some(state), "{content}");
    }
    assert_eq!(any.state_at(Weekday::Monday, time(0, 0, 0, 0)), None);
}

#[test]
fn what_was_hardly_meant_is_taken_with_a_warning() {
    let site = load("warnings.toml");
    assert!(site.warnings.iter().all(|(_, fault)| fault.severity == Severity::Warning));
    let told = site.warnings.to_string();
    let wanted = text_of("warnings.txt");
    assert_eq!(told, wanted.trim_end(), "\n{told}");
}

#[test]
fn others_can_add_faults_at_the_places_that_are_kept() {
    let site = load("full.toml");
    let place = site.cables[0].places.min_suppression.clone().expect("it is written");
    let mut faults = site.faults();
    faults.push(Fault::new(place, "this choke gives 4.1 dB at most in that loop").with_help("fit more cores"));
    let told = faults.render(false);
    assert!(told.contains("full.toml:59:19\n"), "{told}");
    assert!(faults.refuses());
    assert!(faults.render(true).contains("\u{1b}["), "colour is on request");
}

#[test]
fn a_site_file_that_is_not_there_or_no_text() {
    let told = site::load(Path::new("tests/sites/nowhere.toml")).map_err(|faults| faults.to_string());
    let expected = "error: cannot read this file: No such file or directory (os error 2)\n--> tests/sites/nowhere.toml";
    assert_eq!(told.err().as_deref(), Some(expected));
    let folder = tempfile::tempdir().expect("a folder");
    let path = folder.path().join("latin-1.toml");
    std::fs::write(&path, b"name = \"K\xfchlung\"").expect("a file");
    let told = site::load(&path).map_err(|faults| faults.to_string()).err().unwrap_or_default();
    assert!(told.starts_with("error: cannot read this file: stream did not contain valid UTF-8"), "{told}");
}

/// Numbers that look like chance, the same ones each time (xorshift64*, Vigna 2016; from memory).
struct Chance(u64);

impl Chance {
    fn below(&mut self, limit: usize) -> usize {
        self.0 ^= self.0 >> 12;
        self.0 ^= self.0 << 25;
        self.0 ^= self.0 >> 27;
        let number = self.0.wrapping_mul(0x2545_F491_4F6C_DD1D) >> 33;
        usize::try_from(number).unwrap_or(0) % limit.max(1)
    }
}

/// Letters are taken out, put in, copied and swapped; whatever comes of it is either read or told, and what is told
/// can be shown.
#[test]
fn no_file_brings_the_reader_down() {
    const PIECES: [&str; 18] = [
        "\"",
        "[",
        "]",
        "[[",
        "]]",
        "{",
        "}",
        "=",
        ",",
        "\n",
        "\u{fc}",
        "\u{1f50c}",
        "-",
        "1e308 Hz",
        "nan",
        "\t\u{7f}",
        "0x10",
        "\"\"",
    ];
    let mut chance = Chance(0x9E37_79B9_7F4A_7C15);
    let texts = ["full.toml", "minimal.toml", "warnings.toml"].map(text_of);
    let mut refused = 0;
    for round in 0..3000 {
        let mut letters: Vec<char> = texts[round % texts.len()].chars().collect();
        for _ in 0..=chance.below(3) {
            let at = chance.below(letters.len());
            match chance.below(4) {
                0 => drop(letters.drain(at..(at + chance.below(12)).min(letters.len()))),
                1 => drop(letters.splice(at..at, PIECES[chance.below(PIECES.len())].chars())),
                2 => {
                    let from = chance.below(letters.len());
                    let piece: Vec<char> = letters[from..(from + chance.below(80)).min(letters.len())].to_vec();
                    drop(letters.splice(at..at, piece));
                }
                _ => {
                    let next = (at + 1).min(letters.len() - 1);
                    letters.swap(at, next);
                }
            }
        }
        let text: String = letters.into_iter().collect();
        if let Err(faults) = site::parse(&text, Path::new("tests/sites/changed.toml")) {
            assert!(faults.refuses() && !faults.render(round % 2 == 0).is_empty(), "{text}");
            refused += 1;
        }
    }
    assert!((1000..3000).contains(&refused), "{refused} of 3000 were refused: the changes are too small or too great");
}
