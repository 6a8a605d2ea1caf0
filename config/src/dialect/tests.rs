//! The built-in dialect is right, and what is wrong with another one is told at its place.

use hushwatch_quantity::{Detector, FilterShape, ReceiverUnit};

use super::*;

const LEAST: &str = r#"
format = 1
name = "least"
identify = { query = "ID" }
setting.start_hz = { set = "A {start_hz}" }
setting.stop_hz = { set = "B {stop_hz}" }
values = [{ coding = "ascii" }]
sweep = { read = "R", max_points = 100 }
"#;

fn faults_of(text: &str) -> String {
    parse(text, Path::new("d.toml")).expect_err("must be refused").to_string()
}

#[test]
fn every_built_in_dialect_is_right_and_bears_its_name() {
    for name in BUILTIN {
        let dialect = builtin(name).unwrap_or_else(|| {
            panic!("{}", parse(SCPI_SWEPT, Path::new(name)).expect_err("the built-in file is faulty"))
        });
        assert_eq!(dialect.name, name);
    }
    assert_eq!(builtin("scpi-swep"), None);
}

#[test]
fn settings_are_sent_in_the_order_of_the_file() {
    let dialect = builtin("scpi-swept").expect("built in");
    let order: Vec<_> = dialect.settings.iter().map(|setting| setting.quantity.label()).collect();
    assert_eq!(
        order,
        ["start_hz", "stop_hz", "points", "rbw_hz", "vbw_hz", "detector", "sweep_s", "attenuation_db", "unit"]
    );
}

#[test]
fn there_is_a_word_for_every_detector_shape_and_unit() {
    let words = |quantity| file::words_of(quantity).expect("has words").to_vec();
    assert_eq!(words(Quantity::Detector), Detector::ALL.map(Detector::label));
    assert_eq!(words(Quantity::BandwidthShape), FilterShape::ALL.map(FilterShape::label));
    assert_eq!(words(Quantity::Unit), [ReceiverUnit::Dbm, ReceiverUnit::DbMicrovolt].map(ReceiverUnit::label));
    let dialect = builtin("scpi-swept").expect("built in");
    for setting in &dialect.settings {
        assert_eq!(setting.words.len(), file::words_of(setting.quantity).map_or(0, <[_]>::len), "{}", setting.quantity);
    }
}

#[test]
fn the_least_dialect_has_the_defaults() {
    let dialect = parse(LEAST, Path::new("d.toml")).expect("is right");
    assert_eq!(dialect.line, Line { send: LineEnd::Lf, receive: LineEnd::Lf });
    assert_eq!((dialect.errors, dialect.select_input, dialect.byte_order), (None, None, None));
    assert_eq!(dialect.settings[0].compare, Compare::Equal { tolerance: 0.0 });
    assert!(!dialect.settings[0].may_be_unknown);
}

#[test]
fn a_misspelt_placeholder_is_told_with_the_known_ones() {
    let text = faults_of(&LEAST.replace("A {start_hz}", "A {strt_hz}"));
    assert!(text.contains("d.toml:5:"), "{text}");
    assert!(text.contains("unknown placeholder `{strt_hz}`"), "{text}");
    assert!(text.contains("start_hz, stop_hz, center_hz"), "{text}");
}

#[test]
fn all_faults_are_told_at_once() {
    let text = r#"
format = 1
name = "bad"
identify = { query = "*IDN? {points}" }
[setting.start_hz]
set = "FREQ:STAR 100"
compare = "about"
[setting.stop_hz]
set = "FREQ:STOP {stop_hz}"
tolerence = 0.1
[setting.detector]
set = "DET {detector}"
words = { rmss = "RMS" }
[[values]]
coding = "real-64"
get = "FORM?"
[sweep]
read = "TRAC? {"
max_points = 1
"#;
    let text = faults_of(text);
    for (line, what) in [
        (4, "`{points}` cannot be filled in here"),
        (6, "does not say the start_hz"),
        (7, "`compare` cannot be `about`"),
        (10, "unknown key `tolerence`"),
        (13, "unknown key `rmss`"),
        (15, "`coding` cannot be `real-64`"),
        (14, "`expect` is missing"),
        (18, "a brace without its partner"),
        (19, "`max_points` must lie between"),
    ] {
        assert!(text.contains(&format!("d.toml:{line}:")), "line {line} is not named in\n{text}");
        assert!(text.contains(what), "{what} is not told in\n{text}");
    }
}

#[test]
fn contradictions_are_refused() {
    for (from, to, what) in [
        ("setting.stop_hz = { set = \"B {stop_hz}\" }", "", "no setting tells the instrument where to sweep"),
        ("{ set = \"A {start_hz}\" }", "{ set = \"A {start_hz}\", words = {} }", "is a number and has no words"),
        (
            "{ set = \"A {start_hz}\" }",
            "{ set = \"A {start_hz}\", compare = \"text\", tolerance = 0.1 }",
            "no tolerance",
        ),
        ("values = [{ coding = \"ascii\" }]", "", "`values` is missing"),
        ("format = 1", "format = 2", "`format` must lie between 1 and 1"),
        ("format = 1", "format = 1\ninput = { select = \"ROUT:CLOS\" }", "this selects no input"),
        (
            "format = 1",
            "format = 1\nsetting.detector = { set = \"D {detector}\", compare = \"equal\" }",
            "`detector` is a word, not a number",
        ),
    ] {
        let text = faults_of(&LEAST.replace(from, to));
        assert!(text.contains(what), "{what} is not told in\n{text}");
    }
}
