//! Curves over frequency: tables of pairs in the site file, or CSV files of two columns beside it.
//!
//! A CSV file has a frequency and a value on each line, separated by a comma, a semicolon or a tab; `#` begins a
//! remark. A first line that is no pair of numbers is a heading; if it names kHz, MHz or GHz, bare frequencies are in
//! that unit, else in Hz. A frequency may be written with its unit, as in `150 kHz`.

use std::ops::Range;
use std::path::Path;
use std::sync::Arc;

use crate::faults::{Fault, Faults, Source};
use crate::walk::{Dimension, FREQUENCY, Value};

/// Pairs of frequency (Hz) and value, of strictly rising frequency, two at least.
pub(crate) type Points = Vec<(f64, f64)>;

/// The frequencies over which a value that does not depend on frequency is given, Hz.
pub(super) const EVERYWHERE: (f64, f64) = (1.0, 1e12);

/// The same value at all frequencies.
pub(super) fn flat(value: f64) -> Points {
    vec![(EVERYWHERE.0, value), (EVERYWHERE.1, value)]
}

/// A table in the file, `[["150 kHz", 2.0], ...]`, or one value for all frequencies.
pub(crate) fn read_table(value: Value<'_>, dimension: &'static Dimension) -> Option<Points> {
    if !value.is_list() {
        return value.quantity(dimension).map(flat);
    }
    let rows = value.list()?;
    let read = rows.iter().map(|row| {
        let [hz, value] = row.tuple("[\"150 kHz\", 2.0]")?;
        let (hz, value) = (read_frequency(hz), value.quantity_or_number(dimension));
        Some((hz?, value?))
    });
    // Collected first: every row is to be read, so that all that is wrong is told.
    let points: Vec<Option<(f64, f64)>> = read.collect();
    let points: Points = points.into_iter().collect::<Option<_>>()?;
    let places = rows.iter().map(Value::span);
    match disorder(points.iter().map(|(hz, _)| *hz).zip(places), &value.span()) {
        Some(fault) => {
            value.collector().push(fault);
            None
        }
        None => Some(points),
    }
}

/// A frequency above nought.
pub(super) fn read_frequency(value: Value<'_>) -> Option<f64> {
    value.quantity_within(&FREQUENCY, 1.0..=1e12)
}

/// What is wrong with the order or number of points, each a frequency with its place.
pub(super) fn disorder(points: impl Iterator<Item = (f64, Range<usize>)>, whole: &Range<usize>) -> Option<Fault> {
    let mut before: Option<(f64, Range<usize>)> = None;
    let mut count = 0;
    for (hz, place) in points {
        if let Some((earlier, related)) = before.filter(|(earlier, _)| *earlier >= hz) {
            let what = format!("{} does not come after {}", FREQUENCY.write(hz), FREQUENCY.write(earlier));
            let fault = Fault::new(place, what).with_related(related, "this one stands before it");
            return Some(fault.with_help("sort the points by rising frequency, and give each frequency once"));
        }
        before = Some((hz, place));
        count += 1;
    }
    let too_few = || Fault::new(whole.clone(), format!("a curve needs two points at least, here are {count}"));
    (count < 2).then(|| too_few().with_help("write the first and the last frequency that matter, at least"))
}

/// The points of the CSV file that `value` names, relative to `base`.
pub(super) fn read_file(value: Value<'_>, base: &Path, dimension: &'static Dimension) -> Option<Points> {
    let path = base.join(value.line()?);
    let text = match std::fs::read_to_string(&path) {
        Ok(text) => text,
        Err(error) => {
            return value.refuse(
                format!("cannot read `{}`: {error}", path.display()),
                "the path is taken from the folder of the site file",
            );
        }
    };
    match parse_csv(&text, &path, dimension) {
        Ok(points) => Some(points),
        Err(faults) => {
            value.collector().absorb(faults);
            None
        }
    }
}

fn parse_csv(text: &str, path: &Path, dimension: &'static Dimension) -> Result<Points, Faults> {
    let mut faults = Faults::new(Arc::new(Source { path: path.to_owned(), text: text.to_owned() }));
    let mut points = Vec::new();
    let mut places = Vec::new();
    let mut bare_unit = 1.0;
    let mut first = true;
    for line in lines(text) {
        let content = &text[line.clone()];
        let heading =
            std::mem::take(&mut first) && !content.starts_with(|c: char| c.is_ascii_digit() || "+-.\"".contains(c));
        if heading {
            bare_unit = unit_of_heading(content);
            continue;
        }
        match parse_row(content, bare_unit, dimension) {
            Ok(point) => {
                points.push(point);
                places.push(line);
            }
            Err(what) => {
                let help = format!("write a frequency and {} on each line, as in `150 kHz, 2.0`", dimension.name);
                faults.push(Fault::new(line, what).with_help(help));
            }
        }
    }
    if faults.is_empty() {
        let places = places.iter().cloned();
        if let Some(fault) = disorder(points.iter().map(|(hz, _): &(f64, f64)| *hz).zip(places), &(0..0)) {
            faults.push(fault);
        }
    }
    if faults.is_empty() { Ok(points) } else { Err(faults) }
}

/// The places of the lines that say something: without remarks, line ends and the space around them.
fn lines(text: &str) -> impl Iterator<Item = Range<usize>> {
    // Some programs put a byte order mark before the first line.
    let mark = if text.starts_with('\u{feff}') { '\u{feff}'.len_utf8() } else { 0 };
    let mut at = mark;
    text[mark..].split('\n').filter_map(move |line| {
        let start = at;
        at += line.len() + 1;
        let said = line.split('#').next().unwrap_or_default();
        let content = said.trim();
        let from = start + (said.len() - said.trim_start().len());
        (!content.is_empty()).then(|| from..from + content.len())
    })
}

/// What a bare frequency is worth below this heading, in Hz.
fn unit_of_heading(heading: &str) -> f64 {
    let first = fields(heading).next().unwrap_or_default().to_lowercase();
    [("khz", 1e3), ("mhz", 1e6), ("ghz", 1e9)]
        .into_iter()
        .find(|(unit, _)| first.contains(unit))
        .map_or(1.0, |(_, hz)| hz)
}

fn fields(line: &str) -> impl Iterator<Item = &str> {
    let separator = [';', '\t'].into_iter().find(|separator| line.contains(*separator)).unwrap_or(',');
    line.split(separator).map(|field| field.trim().trim_matches('"').trim())
}

fn parse_row(line: &str, bare_unit: f64, dimension: &'static Dimension) -> Result<(f64, f64), String> {
    let mut fields = fields(line);
    let (Some(hz), Some(value), None) = (fields.next(), fields.next(), fields.next()) else {
        return Err(String::from("here two columns belong"));
    };
    let number = |text: &str| text.parse().ok().filter(|number: &f64| number.is_finite());
    let hz_value = number(hz).map(|hz| hz * bare_unit).or_else(|| FREQUENCY.value_of(hz));
    let hz_value =
        hz_value.filter(|hz| *hz > 0.0).ok_or_else(|| format!("`{}` is not a frequency", hz.escape_debug()))?;
    let value_there = number(value).or_else(|| dimension.value_of(value));
    let value = value_there.ok_or_else(|| format!("`{}` is not {}", value.escape_debug(), dimension.name))?;
    Ok((hz_value, value))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::walk::FACTOR;

    fn read(text: &str) -> Result<Points, String> {
        parse_csv(text, Path::new("clamp.csv"), &FACTOR).map_err(|faults| faults.to_string())
    }

    #[test]
    fn spellings_of_the_same_table() {
        let wanted = vec![(150e3, 2.0), (2e6, -12.5)];
        for text in [
            "150000,2\n2000000,-12.5",
            "hz,dB(ohm)\n150000,2\n2e6,-12.5\n",
            "# calibrated\r\nfrequency;factor\r\n150 kHz;2.0\r\n\r\n2 MHz ; -12.5 dB(ohm) # last\r\n",
            "\u{feff}f in MHz\tdB\n0.15\t2\n2\t-12.5",
            "\"150 kHz\",\"2\"\n\"2 MHz\",\"-12.5\"\n",
        ] {
            assert_eq!(read(text), Ok(wanted.clone()), "{text}");
        }
    }

    #[test]
    fn faults_lie_in_the_csv_file_itself() {
        let told = read("hz,dB\n150000,2\n  2 MHz,1,5\n3e6,much\n").expect_err("three columns, then no number");
        let expected = "\
error: here two columns belong
 --> clamp.csv:3:3
  |
3 |   2 MHz,1,5
  |   ^^^^^^^^^
  |
  = help: write a frequency and a current probe's factor on each line, as in `150 kHz, 2.0`

error: `much` is not a current probe's factor
 --> clamp.csv:4:1
  |
4 | 3e6,much
  | ^^^^^^^^
  |
  = help: write a frequency and a current probe's factor on each line, as in `150 kHz, 2.0`";
        assert_eq!(told, expected, "\n{told}");
    }

    #[test]
    fn points_must_rise_and_be_two() {
        let told = read("2 MHz,1\n1 MHz,2\n").expect_err("falls");
        assert!(told.starts_with("error: 1 MHz does not come after 2 MHz\n --> clamp.csv:2:1"), "{told}");
        let told = read("# nothing\n1 MHz,2\n").expect_err("one point");
        assert!(told.starts_with("error: a curve needs two points at least, here are 1\n --> clamp.csv:1:1"), "{told}");
    }
}
