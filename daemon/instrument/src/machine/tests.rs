use core::time::Duration;
use std::path::Path;

use hushwatch_config::dialect::{self, Coding, Quantity};
use hushwatch_quantity::ReceiverUnit;
use proptest::prelude::*;

use super::*;
use crate::answer::AnswerError;
use crate::bench::{Bench, IDENTITY, Manner, plan, segment};
use crate::framing::{Answer, Decoder};
use crate::plan::{Reading, Value};

fn rules() -> Rules {
    Rules {
        dialect: dialect::builtin("scpi-swept").expect("it is built in"),
        identity: Some("RX-0".to_owned()),
        timeout: Duration::from_secs(3),
        byte_time: Duration::from_micros(4),
        attenuation_db: Some(10.0),
        unit: ReceiverUnit::Dbm,
        ask_clock: false,
        port: "/dev/rx".to_owned(),
    }
}

/// A machine and a device with a wire between them, and a clock that only waiting moves.
struct Wire {
    machine: Machine,
    bench: Bench,
    clock: Duration,
    plugged: bool,
    /// The answer to this query comes after its time, once.
    late: Option<&'static str>,
    /// What has come and was not read.
    waiting: Vec<u8>,
    opened_after: Vec<Duration>,
    drained: usize,
}

impl Wire {
    fn new(bench: Bench) -> Self {
        Self::with(rules(), bench)
    }

    fn with(rules: Rules, bench: Bench) -> Self {
        Self {
            machine: Machine::new(rules),
            bench,
            clock: Duration::ZERO,
            plugged: true,
            late: None,
            waiting: Vec::new(),
            opened_after: Vec::new(),
            drained: 0,
        }
    }

    fn sweep(&mut self, plan: &SweepPlan) -> Result<SweepAnswer, InstrumentError> {
        let mut action = self.machine.start(plan.clone());
        for _ in 0..2000 {
            if let Action::Finish(outcome) = action {
                return outcome;
            }
            let event = self.act(action);
            action = self.machine.step(event);
        }
        panic!("the conversation does not end; heard last: {:?}", self.bench.heard.iter().rev().take(20));
    }

    fn act(&mut self, action: Action) -> Event {
        match action {
            Action::Open { after } => {
                self.opened_after.push(after);
                self.clock += after;
                self.waiting.clear();
                if self.plugged { Event::Opened } else { Event::Gone("no such file".to_owned()) }
            }
            _ if !self.plugged => Event::Gone("hung up".to_owned()),
            Action::Tell { bytes } => match self.tell(&bytes) {
                Ok(None) => Event::Done,
                Ok(Some(answer)) => panic!("a command was answered with {answer:?}"),
                Err(event) => event,
            },
            Action::Ask { bytes, expected, patience } => {
                let late = self.late.take_if(|late| bytes.starts_with(late.as_bytes())).is_some();
                match self.tell(&bytes) {
                    Ok(Some(answer)) if !late => {
                        self.clock += Duration::from_micros(100);
                        match Decoder::new(expected).push(&answer) {
                            Ok(Some(answer)) => Event::Answered(answer),
                            Ok(None) => {
                                self.clock += patience.first;
                                Event::TimedOut
                            }
                            Err(what) => Event::Garbled(what.into()),
                        }
                    }
                    Ok(answer) => {
                        self.clock += patience.first;
                        self.waiting = answer.unwrap_or_default();
                        Event::TimedOut
                    }
                    Err(event) => event,
                }
            }
            Action::Drain { quiet, .. } => {
                self.clock += quiet;
                self.drained += 1;
                self.waiting.clear();
                Event::Quiet
            }
            Action::Pause(time) => {
                self.clock += time;
                Event::Done
            }
            Action::Finish(_) => panic!("it is finished"),
        }
    }

    fn tell(&mut self, bytes: &[u8]) -> Result<Option<Vec<u8>>, Event> {
        if !self.waiting.is_empty() {
            return Err(Event::Garbled(Garbage::Unasked("late".to_owned())));
        }
        let line = str::from_utf8(bytes).expect("text").strip_suffix('\n').expect("a line end");
        Ok(self.bench.hear(line))
    }

    fn heard(&mut self) -> Vec<String> {
        std::mem::take(&mut self.bench.heard)
    }
}

#[test]
fn a_healthy_device_is_set_read_back_and_swept_in_both_codings() {
    for no_real in [false, true] {
        let mut wire = Wire::new(Bench { no_real, ..Bench::default() });
        let answer = wire.sweep(&plan(201)).expect("a sweep");
        assert_eq!(wire.machine.known.coding, Some(if no_real { Coding::Ascii } else { Coding::Real32 }));
        // SCPI's 9.91E37 stands for a point that was not measured.
        assert!(wire.bench.sent(&answer.segments[0]), "{:?}", &answer.segments[0][..4]);
        assert_eq!(answer.segments[0].len(), 201);
        assert_eq!(answer.unit, ReceiverUnit::Dbm);
        assert_eq!(answer.settings.identity, IDENTITY);
        assert_eq!(answer.settings.assumed(), Vec::<&str>::new());
        assert_eq!(answer.settings.reading(0, Quantity::RbwHz), Some(&Reading::Told(Value::Number(9000.0))));
        assert_eq!(answer.settings.reading(0, Quantity::Unit), Some(&Reading::Told(Value::Word("DBM".to_owned()))));
        assert_eq!(wire.machine.identity(), Some(IDENTITY));
        assert!(wire.clock < Duration::from_millis(100), "{:?}", wire.clock);
    }
}

#[test]
fn a_steady_sweep_only_reads_back() {
    let mut wire = Wire::new(Bench::sparse());
    wire.sweep(&plan(201)).expect("a sweep");
    wire.heard();
    wire.sweep(&plan(201)).expect("a sweep");
    assert_eq!(
        wire.heard(),
        [
            "ROUT:CLOS (@1)",
            "INIT",
            "*OPC?",
            "TRAC? TRACE1",
            "FREQ:STAR?",
            "FREQ:STOP?",
            "SWE:POIN?",
            "BAND?",
            "SYST:ERR?"
        ]
    );
}

#[test]
fn what_a_device_does_not_know_is_assumed_and_takes_no_time() {
    let mut wire = Wire::new(Bench::sparse());
    let answer = wire.sweep(&plan(201)).expect("a sweep");
    assert_eq!(answer.settings.assumed(), ["attenuation_db", "detector", "sweep_s", "unit", "vbw_hz"]);
    assert_eq!(answer.settings.reading(0, Quantity::Detector), Some(&Reading::Assumed(Value::Word("RMS".to_owned()))));
    // It does not tell how it codes, either; the block itself does.
    assert!(wire.bench.sent(&answer.segments[0]));
    assert!(wire.clock < Duration::from_millis(500), "{:?}", wire.clock);
    assert_eq!(wire.drained, 1);
}

#[test]
fn a_command_lost_to_noise_once_is_not_taken_for_unknown() {
    let brings = vec![("DET RMS", "-113,\"Undefined header\"")];
    let mut wire = Wire::new(Bench { brings, ..Bench::default() });
    let answer = wire.sweep(&plan(201)).expect("a sweep");
    assert_eq!(answer.settings.reading(0, Quantity::Detector), Some(&Reading::Told(Value::Word("RMS".to_owned()))));
}

#[test]
fn a_setting_that_must_be_there_is_never_assumed() {
    let mut wire = Wire::new(Bench { lacks: vec!["FREQ:STOP"], ..Bench::default() });
    let error = wire.sweep(&plan(201)).expect_err("no stop frequency");
    assert!(matches!(&error, InstrumentError::Refused { command, .. } if command == "FREQ:STOP 450000"), "{error}");
    assert_eq!(error.class(), ErrorClass::Settings);
}

#[test]
fn a_late_answer_is_never_taken_for_the_next_one() {
    for late in ["TRAC?", "*OPC?", "BAND?", "FREQ:STAR?", "SYST:ERR?"] {
        let mut wire = Wire::new(Bench::default());
        wire.sweep(&plan(201)).expect("a sweep");
        wire.late = Some(late);
        let error = wire.sweep(&plan(201)).expect_err("nothing came in time");
        assert_eq!(error.class(), ErrorClass::NoAnswer, "{late}: {error}");
        assert_eq!(wire.machine.identity(), None);
        wire.drained = 0;
        let answer = wire.sweep(&plan(201)).expect("in step again");
        assert!(wire.bench.sent(&answer.segments[0]));
        // The identity must be told twice, with quiet before each.
        assert_eq!(wire.drained, 2, "{late}");
        assert_eq!(wire.opened_after, [Duration::ZERO], "the port stays open");
    }
}

#[test]
fn bytes_that_nobody_asked_for_bring_the_line_in_step_within_the_plan() {
    let mut wire = Wire::new(Bench::default());
    wire.sweep(&plan(201)).expect("a sweep");
    wire.waiting = b"-3.5\n".to_vec();
    wire.drained = 0;
    let answer = wire.sweep(&plan(201)).expect("a sweep");
    assert!(wire.bench.sent(&answer.segments[0]));
    assert_eq!(wire.drained, 2);
}

#[test]
fn another_identity_is_told_as_such() {
    let mut wire = Wire::new(Bench { identity: "Bench,OTHER,1,1.0".to_owned(), ..Bench::default() });
    let error = wire.sweep(&plan(201)).expect_err("another device");
    let InstrumentError::WrongIdentity { got, expected } = &error else { panic!("{error}") };
    assert_eq!((got.as_str(), expected.as_str()), ("Bench,OTHER,1,1.0", "RX-0"));
    assert!(!wire.heard().iter().any(|line| line == "INIT"), "it must not be made to sweep");
    wire.bench.identity = IDENTITY.to_owned();
    wire.sweep(&plan(201)).expect("the right one again");
}

#[test]
fn without_a_stated_identity_the_first_one_counts() {
    let mut wire = Wire::with(Rules { identity: None, ..rules() }, Bench::default());
    wire.sweep(&plan(201)).expect("a sweep");
    wire.plugged = false;
    assert_eq!(wire.sweep(&plan(201)).expect_err("unplugged").class(), ErrorClass::Gone);
    wire.plugged = true;
    wire.bench.identity = "Bench,RX-0,2,1.0".to_owned();
    assert_eq!(wire.sweep(&plan(201)).expect_err("exchanged").class(), ErrorClass::WrongIdentity);
}

#[test]
fn fewer_points_than_asked_for_teach_how_many_it_can() {
    let mut wire = Wire::new(Bench { most_points: 401, ..Bench::default() });
    assert_eq!(wire.machine.most_points(), 1001);
    let too_many = InstrumentError::TooManyPoints { asked: 1001, limit: 401 };
    assert_eq!(wire.sweep(&plan(1001)), Err(too_many.clone()));
    assert_eq!(wire.machine.most_points(), 401);
    wire.heard();
    assert_eq!(wire.sweep(&plan(1001)), Err(too_many));
    assert_eq!(wire.heard(), Vec::<String>::new());
    assert!(wire.sweep(&plan(401)).is_ok());
}

#[test]
fn a_device_left_in_another_unit_gives_no_level() {
    let mut wire = Wire::new(Bench { stuck: vec!["UNIT:POW"], ..Bench::default() });
    let error = wire.sweep(&plan(201)).expect_err("107 dB off");
    let expected = InstrumentError::SettingsMismatch {
        setting: "unit".to_owned(),
        asked: "DBM".to_owned(),
        got: "DBUV".to_owned(),
    };
    assert_eq!(error, expected);
    assert_eq!(error.class(), ErrorClass::Settings);
    let heard = wire.heard();
    assert!(!heard.iter().any(|line| line == "INIT"));
    assert_eq!(heard.iter().filter(|line| *line == "UNIT:POW DBM").count(), 2, "tried twice");
}

#[test]
fn a_knob_turned_during_the_sweep_costs_the_sweep_but_not_the_plan() {
    let mut wire = Wire::new(Bench { turned: [("INP:ATT", "30")].into(), ..Bench::default() });
    let answer = wire.sweep(&plan(201)).expect("swept again");
    assert_eq!(answer.segments.len(), 1);
    assert_eq!(wire.heard().iter().filter(|line| *line == "INIT").count(), 2);
    wire.bench.turned = [("INP:ATT", "30"), ("INP:ATT", "20")].into();
    let error = wire.sweep(&plan(201)).expect_err("turned again and again");
    assert!(matches!(error, InstrumentError::SettingsMismatch { ref got, .. } if got == "20"), "{error}");
    wire.sweep(&plan(201)).expect("left alone");
}

#[test]
fn a_device_that_was_started_anew_is_prepared_anew() {
    let mut wire = Wire::new(Bench::default());
    let at_2 = SweepPlan { input: 2, ..plan(201) };
    wire.sweep(&at_2).expect("a sweep");
    // Its power fails while it sweeps: all is as after a reset, but for the coding, by which it would be noticed.
    let form = wire.bench.settings["FORM"].clone();
    wire.bench.settings = Bench::default().settings;
    wire.bench.settings.insert("FORM".to_owned(), form);
    wire.bench.settings.insert("SWE:POIN".to_owned(), "201".to_owned());
    wire.heard();
    wire.sweep(&at_2).expect("a sweep");
    let heard = wire.heard();
    for line in ["INIT:CONT OFF", "FORM REAL,32", "UNIT:POW DBM"] {
        assert_eq!(heard.iter().filter(|heard| *heard == line).count(), 1, "{line}");
    }
    assert_eq!(heard.iter().filter(|line| *line == "ROUT:CLOS (@2)").count(), 2);
}

#[test]
fn a_sweep_that_the_device_makes_longer_is_waited_for() {
    let mut wire = Wire::new(Bench::default());
    wire.bench.answers.insert("SWE:TIME?", "60");
    let mut action = wire.machine.start(plan(201));
    let first = loop {
        match &action {
            Action::Ask { bytes, patience, .. } if bytes.starts_with(b"*OPC?") => break patience.first,
            Action::Finish(outcome) => panic!("{outcome:?}"),
            _ => {}
        }
        let event = wire.act(action);
        action = wire.machine.step(event);
    };
    assert_eq!(first, Duration::from_secs(63));
    // Nonsense does not make it wait for ever.
    wire.bench.answers.insert("SWE:TIME?", "9.9E37");
    wire.sweep(&plan(201)).expect("a sweep");
    wire.late = Some("*OPC?");
    assert!(wire.sweep(&plan(201)).is_err());
    assert!(wire.clock < Duration::from_hours(8 * 24));
}

#[test]
fn a_short_trace_is_no_sweep() {
    for no_real in [false, true] {
        let mut wire = Wire::new(Bench { short_by: 1, no_real, ..Bench::default() });
        let error = wire.sweep(&plan(201)).expect_err("one is missing");
        let what = Garbage::Content(AnswerError::WrongCount { got: 200, expected: 201 });
        assert_eq!(error, InstrumentError::Garbage { question: "TRAC? TRACE1".to_owned(), what });
    }
}

#[test]
fn segments_are_swept_one_after_the_other() {
    let mut wire = Wire::new(Bench::default());
    let segments = vec![segment(150e3, 450e3, 201), segment(450e3, 1e6, 101), segment(1e6, 30e6, 301)];
    let answer = wire.sweep(&SweepPlan { segments, ..plan(2) }).expect("a sweep");
    assert_eq!(answer.segments.iter().map(Vec::len).collect::<Vec<_>>(), [201, 101, 301]);
    let stop = |segment| answer.settings.reading(segment, Quantity::StopHz);
    assert_eq!(stop(1), Some(&Reading::Told(Value::Number(1e6))));
    assert_eq!(stop(2), Some(&Reading::Told(Value::Number(30e6))));
    // What stays is not sent again.
    assert_eq!(wire.heard().iter().filter(|line| line.starts_with("DET ")).count(), 1);
}

#[test]
fn the_order_of_bytes_is_that_which_the_device_tells() {
    let mut wire = Wire::new(Bench { little: true, ..Bench::default() });
    let answer = wire.sweep(&plan(201)).expect("a sweep");
    assert!(wire.bench.sent(&answer.segments[0]));
    // If it does not tell, the levels show it.
    let mut wire = Wire::new(Bench { little: true, lacks: vec!["FORM:BORD"], ..Bench::default() });
    let error = wire.sweep(&plan(201)).expect_err("no levels");
    assert!(matches!(error, InstrumentError::Garbage { what: Garbage::Content(AnswerError::NoLevel { .. }), .. }));
}

#[test]
fn inputs_are_selected_and_waited_for_when_they_change() {
    let mut wire = Wire::new(Bench::default());
    let settle = Duration::from_millis(70);
    let at = |input| SweepPlan { input, settle, ..plan(201) };
    wire.sweep(&at(2)).expect("a sweep");
    for (input, waited) in [(2, false), (3, true), (3, false)] {
        let before = wire.clock;
        let answer = wire.sweep(&at(input)).expect("a sweep");
        assert_eq!(answer.settings.input, input);
        assert_eq!(wire.clock >= before + settle, waited);
        assert_eq!(wire.bench.settings["ROUT:CLOS"], format!("(@{input})"));
    }
}

#[test]
fn a_device_without_a_switch_has_input_1_only() {
    let mut wire = Wire::new(Bench { lacks: vec!["ROUT:CLOS"], ..Bench::default() });
    wire.sweep(&plan(201)).expect("a sweep");
    wire.heard();
    wire.sweep(&plan(201)).expect("a sweep");
    assert!(!wire.heard().iter().any(|line| line.starts_with("ROUT")));
    let error = wire.sweep(&SweepPlan { input: 2, ..plan(201) }).expect_err("its levels would be those of input 1");
    assert_eq!(error.class(), ErrorClass::Settings);
}

#[test]
fn errors_of_the_sweep_are_told() {
    let brings = vec![("INIT", "-240,\"Hardware error;\"\"PLL\"\" unlocked\"")];
    let mut wire = Wire::new(Bench { brings, no_real: true, ..Bench::default() });
    wire.bench.answers.insert("TRAC?", "-1,-2");
    let error = wire.sweep(&plan(2)).expect_err("no lock");
    let errors = "-240 Hardware error;\"PLL\" unlocked".to_owned();
    assert_eq!(error, InstrumentError::Device { after: "INIT, TRAC? TRACE1".to_owned(), errors });
    assert!(wire.machine.identity().is_some(), "the line is in step");
}

#[test]
fn a_query_without_an_answer_is_given_up_only_if_it_was_never_answered() {
    let mut wire = Wire::new(Bench { mute: vec!["DET"], ..Bench::default() });
    let answer = wire.sweep(&plan(201)).expect("a sweep");
    assert_eq!(answer.settings.assumed(), ["detector"]);
    wire.heard();
    wire.sweep(&plan(201)).expect("a sweep");
    assert!(!wire.heard().iter().any(|line| line == "DET?"));

    wire.bench.mute = vec!["INP:ATT"];
    let error = wire.sweep(&plan(201)).expect_err("it was answered before");
    assert_eq!(error.class(), ErrorClass::NoAnswer);
}

#[test]
fn a_first_answer_that_takes_long_is_waited_for_the_second_time() {
    let mut wire = Wire::new(Bench::default());
    wire.late = Some("DET?");
    let answer = wire.sweep(&plan(201)).expect("a sweep");
    assert_eq!(answer.settings.assumed(), Vec::<&str>::new());
    assert!(wire.bench.sent(&answer.segments[0]));
}

#[test]
fn a_silent_device_is_no_answer_and_a_lost_port_is_opened_later_and_later() {
    let mut wire = Wire::new(Bench { manner: Manner::Silent, ..Bench::default() });
    assert_eq!(wire.sweep(&plan(201)).expect_err("silence").class(), ErrorClass::NoAnswer);
    wire.plugged = false;
    for _ in 0..7 {
        assert_eq!(wire.sweep(&plan(201)).expect_err("unplugged").class(), ErrorClass::Gone);
    }
    let after = [0, 250, 500, 1000, 2000, 4000, 8000, 10_000].map(Duration::from_millis);
    assert_eq!(wire.opened_after, after);
    wire.plugged = true;
    wire.bench.manner = Manner::Healthy;
    wire.sweep(&plan(201)).expect("a sweep");
    wire.plugged = false;
    assert_eq!(wire.sweep(&plan(201)).expect_err("unplugged").class(), ErrorClass::Gone);
    assert_eq!(wire.sweep(&plan(201)).expect_err("unplugged").class(), ErrorClass::Gone);
    assert_eq!(wire.opened_after.last(), Some(&Duration::from_millis(250)));
}

#[test]
fn a_port_in_other_hands_is_told_as_such() {
    let mut machine = Machine::new(rules());
    assert_eq!(machine.start(plan(201)), Action::Open { after: Duration::ZERO });
    let held = InstrumentError::Held { port: "/dev/rx".to_owned() };
    assert_eq!(machine.step(Event::Held), Action::Finish(Err(held.clone())));
    assert_eq!(held.to_string(), "another process holds /dev/rx");
    assert_eq!(held.class(), ErrorClass::Held);
}

#[test]
fn a_plan_given_up_leaves_nothing_behind() {
    // Dropped after any number of actions, the next plan must still get its own answer.
    for actions in 0..60 {
        let mut wire = Wire::new(Bench::default());
        let mut action = wire.machine.start(plan(201));
        for _ in 0..actions {
            if matches!(action, Action::Finish(_)) {
                break;
            }
            let event = wire.act(action);
            action = wire.machine.step(event);
        }
        // The answer to what was just asked comes after it was given up.
        if let Action::Ask { bytes, .. } = &action {
            wire.waiting = wire.tell(bytes).expect("nothing waits").unwrap_or_default();
        }
        wire.bench.level = -41.25;
        let answer = wire.sweep(&plan(101)).expect("a sweep");
        assert_eq!(answer.segments[0].len(), 101);
        assert!(wire.bench.sent(&answer.segments[0]), "given up after {actions} actions");
    }
}

#[test]
fn clock_and_overload_are_asked_for() {
    let text = include_str!("../../../../config/dialects/scpi-swept.toml");
    let text = format!("{text}\n[overload]\nquery = \"STAT:QUES?\"\nmask = 8\n");
    let dialect = dialect::parse(&text, Path::new("bench")).expect("a dialect");
    let mut wire = Wire::with(Rules { dialect, ask_clock: true, ..rules() }, Bench::default());
    wire.bench.answers.insert("SYST:CLOC?", "\"2026-01-02T03:04:05.5Z\"");
    for (bits, overload) in [("+0", false), ("24", true), ("16", false)] {
        wire.bench.answers.insert("STAT:QUES?", bits);
        let answer = wire.sweep(&plan(201)).expect("a sweep");
        assert_eq!(answer.overload, Some(overload), "{bits}");
        assert_eq!(answer.clock, Some(Time::parse_rfc3339("2026-01-02T03:04:05.5Z").expect("a time")));
    }
    wire.bench.answers.insert("SYST:CLOC?", "yesterday");
    assert_eq!(wire.sweep(&plan(201)).expect_err("no time").class(), ErrorClass::Garbage);
}

#[test]
fn plans_that_make_no_sense_are_refused_before_anything_is_sent() {
    let mut machine = Machine::new(rules());
    let mut odd = vec![SweepPlan { segments: Vec::new(), ..plan(2) }, plan(1)];
    odd.extend(
        [(0.0, 1e6), (1e6, 1e6), (f64::NAN, 1e6)]
            .map(|(start, stop)| SweepPlan { segments: vec![segment(start, stop, 11)], ..plan(2) }),
    );
    for plan in odd {
        let action = machine.start(plan);
        assert!(matches!(action, Action::Finish(Err(InstrumentError::Plan(_)))), "{action:?}");
    }
}

/// What a line out of order may bring at any time.
fn any_event() -> impl Strategy<Value = Event> {
    let line = prop_oneof![
        proptest::collection::vec(any::<u8>(), 0..40),
        Just(b"0,\"No error\"".to_vec()),
        Just(b"-113,\"Undefined header\"".to_vec()),
        Just(b"1".to_vec()),
        Just(IDENTITY.as_bytes().to_vec()),
        Just(b"-1,-2,-3".to_vec()),
        Just(b"150000".to_vec()),
    ];
    prop_oneof![
        12 => line.prop_map(|line| Event::Answered(Answer::Line(line))),
        2 => proptest::collection::vec(any::<u8>(), 0..20).prop_map(|payload| Event::Answered(Answer::Block(payload))),
        4 => Just(Event::Done),
        2 => Just(Event::Opened),
        4 => Just(Event::Quiet),
        1 => Just(Event::Held),
        1 => Just(Event::Gone(String::new())),
        1 => Just(Event::TimedOut),
        1 => Just(Event::Restless),
        1 => Just(Event::Garbled(Garbage::Restless)),
        1 => Just(Event::Garbled(Garbage::Unasked(String::new()))),
    ]
}

proptest! {
    #[test]
    fn no_events_make_it_panic_or_tell_another_number_of_points(
        events in proptest::collection::vec(any_event(), 1..300),
    ) {
        let mut machine = Machine::new(rules());
        let mut action = machine.start(plan(3));
        for event in events {
            action = match action {
                Action::Finish(Ok(answer)) => {
                    prop_assert_eq!(answer.segments.iter().map(Vec::len).collect::<Vec<_>>(), [3]);
                    machine.start(plan(3))
                }
                Action::Finish(Err(_)) => machine.start(plan(3)),
                _ => machine.step(event),
            };
        }
    }

    #[test]
    fn a_conversation_with_any_answers_ends(
        answers in proptest::collection::vec(any_event(), 1..20),
    ) {
        let mut machine = Machine::new(rules());
        let mut action = machine.start(plan(3));
        for event in answers.iter().cycle().take(5000) {
            action = match action {
                Action::Finish(_) => return Ok(()),
                Action::Open { .. } => machine.step(Event::Opened),
                Action::Drain { .. } => machine.step(Event::Quiet),
                Action::Tell { .. } | Action::Pause(_) => machine.step(Event::Done),
                Action::Ask { .. } => machine.step(event.clone()),
            };
        }
        prop_assert!(false, "it goes on for ever");
    }
}
