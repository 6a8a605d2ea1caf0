//! The walker tells every fault of a file at its place, in words for people.

use std::sync::Arc;

use hushwatch_config::faults::{Faults, Source};
use hushwatch_config::walk::{self, FREQUENCY, LENGTH, Table};
use hushwatch_quantity::Span;

fn read<T>(text: &str, read: impl FnOnce(&mut Table<'_>) -> Option<T>) -> Result<walk::Read<T>, Faults> {
    walk::document(&Arc::new(Source { path: "hall.toml".into(), text: text.into() }), read)
}

#[track_caller]
fn told<T: std::fmt::Debug>(result: Result<walk::Read<T>, Faults>, expected: &str) {
    let rendered = result.map_or_else(|faults| faults.to_string(), |read| format!("not refused: {read:?}"));
    assert_eq!(rendered, expected.trim_matches('\n'), "\n--- was told:\n{rendered}\n---");
}

#[test]
fn all_faults_of_a_file_in_the_order_of_the_text() {
    let text = "
widht = \"26 mm\"
rbw = \"9 kOhm\"   # \u{fc}ber
count = 7.5
";
    let result = read(text, |table| {
        table.keys(&["rbw", "width", "count", "tag"]);
        let count = table.required("count", "count = 3").and_then(|value| value.integer(1..=9));
        let rbw = table.required("rbw", "rbw = \"9 kHz\"").and_then(|value| value.quantity(&FREQUENCY));
        let width = table.required("width", "width = \"26 mm\"").and_then(|value| value.quantity(&LENGTH));
        let tag = table.required("tag", "tag = \"W12\"").and_then(|value| value.name());
        Some((count?, rbw?, width?, tag?.to_owned()))
    });
    told(
        result,
        r#"
error: `tag` is missing here
 --> hall.toml:1:1
  |
1 |
  | ^
  |
  = help: write it as in `tag = "W12"`

error: unknown key `widht`
 --> hall.toml:2:1
  |
2 | widht = "26 mm"
  | ^^^^^
  |
  = help: did you mean `width`?

error: `9 kOhm` is not a frequency
 --> hall.toml:3:7
  |
3 | rbw = "9 kOhm"   # über
  |       ^^^^^^^^
  |
  = help: write it as in `"9 kHz"`

error: `count` must be a whole number, not a number with a decimal point
 --> hall.toml:4:9
  |
4 | count = 7.5
  |         ^^^
  |
  = help: write a number from 1 to 9, without quotes
"#,
    );
}

#[test]
fn a_syntax_error_is_told_alone() {
    told(
        read("a = [1,\nb = 2\nc =\n", |_| Some(())),
        r"
error: this is not TOML: unexpected `=` in array, expected value, `]`
 --> hall.toml:2:3
  |
2 | b = 2
  |   ^
  |
  = help: mend this first: what else may be wrong with the file is told then
",
    );
}

#[test]
fn spans_take_a_day_as_24_hours() {
    let text = "a = \"400 days\"\nb = \"0.1 ms\"\nc = \"1 week\"\nd = \"2h 30min\"";
    let spans = read(text, |table| {
        table.keys(&["a", "b", "c", "d"]);
        let span = |key| table.required(key, "").and_then(|value| value.duration(Span::ZERO..=Span::from_days(500)));
        Some([span("a")?, span("b")?, span("c")?, span("d")?])
    });
    let wanted = [Span::from_days(400), Span::from_micros(100), Span::from_days(7), Span::from_mins(150)];
    assert_eq!(spans.expect("all are spans").value, wanted);
}
