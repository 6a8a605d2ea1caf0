//! Levels from a CSV file, as `export levels` writes them: `time,cable,band,level,peak,peak_hz,state,quality`, of which the
//! first four are required. Read line by line: memory does not grow with the file.

use std::fs::File;
use std::io::{BufReader, Read};
use std::path::{Path, PathBuf};

use hushwatch_config::site::OperatingStates;
use hushwatch_config::walk::suggestion;
use hushwatch_quantity::{Quality, Reason, Time};

use crate::failure::Failure;

/// The columns, in the order in which they are exported; the first four are required.
const COLUMNS: [&str; 8] = ["time", "cable", "band", "level", "peak", "peak_hz", "state", "quality"];
const REQUIRED: usize = 4;

/// A level as it stands in the file.
#[derive(Debug)]
pub(crate) struct CsvLevel<'a> {
    pub(crate) time: Time,
    pub(crate) cable: &'a str,
    pub(crate) band: &'a str,
    pub(crate) level_db: f64,
    pub(crate) state: &'a str,
    pub(crate) quality: Quality,
    /// The line of the file.
    pub(crate) line: u64,
}

/// A file that is being read.
pub(crate) struct LevelsFile<R> {
    path: PathBuf,
    reader: csv::Reader<R>,
    record: csv::StringRecord,
    /// Where each column stands, if it is there.
    places: [Option<usize>; COLUMNS.len()],
}

impl LevelsFile<BufReader<File>> {
    /// Opens a file and reads its head.
    pub(crate) fn open(path: &Path) -> Result<Self, Failure> {
        let file = File::open(path).map_err(|error| Failure::could_not(format!("{}: {error}", path.display())))?;
        Self::new(path, BufReader::with_capacity(1 << 16, file))
    }
}

impl<R: Read> LevelsFile<R> {
    /// Reads the head.
    pub(crate) fn new(path: &Path, input: R) -> Result<Self, Failure> {
        let mut reader = csv::ReaderBuilder::new().trim(csv::Trim::All).from_reader(input);
        let wrong = |error: csv::Error| Failure::could_not(format!("{}: {error}", path.display()));
        let head = reader.headers().map_err(wrong)?.clone();
        let mut places = [None; COLUMNS.len()];
        for (place, column) in places.iter_mut().zip(COLUMNS) {
            *place = head.iter().position(|name| name == column);
        }
        if let Some(missing) = places.iter().take(REQUIRED).position(Option::is_none) {
            let near = suggestion(COLUMNS[missing], head.iter());
            return Err(Failure::could_not(format!(
                "{}:1: there is no column `{}` ({near}); wanted are time,cable,band,level and, if they are known, \
                 peak,peak_hz,state,quality",
                path.display(),
                COLUMNS[missing]
            )));
        }
        Ok(Self { path: path.to_owned(), reader, record: csv::StringRecord::new(), places })
    }

    /// The next level, if there is one. Lines without a level (an empty field) are passed over.
    pub(crate) fn next(&mut self) -> Result<Option<CsvLevel<'_>>, Failure> {
        loop {
            match self.reader.read_record(&mut self.record) {
                Ok(true) => {}
                Ok(false) => return Ok(None),
                Err(error) => return Err(Failure::could_not(format!("{}: {error}", self.path.display()))),
            }
            if !self.field(3).is_empty() {
                break;
            }
        }
        let time = Time::parse_rfc3339(self.field(0)).map_err(|error| self.wrong("time", 0, &error.to_string()))?;
        let level: f64 = self.field(3).parse().map_err(|_| self.wrong("level", 3, "not a number in dB"))?;
        if !level.is_finite() {
            return Err(self.wrong("level", 3, "not a number in dB"));
        }
        let quality = match self.field(7) {
            "" => Quality { reason: Some(Reason::Imported), ..Quality::GOOD },
            text => {
                text.parse().map_err(|()| self.wrong("quality", 7, "not a quality as in `good` or `bad: overload`"))?
            }
        };
        let state = match self.field(6) {
            "" => OperatingStates::UNKNOWN,
            state => state,
        };
        let (cable, band) = (self.field(1), self.field(2));
        Ok(Some(CsvLevel { time, cable, band, level_db: level, state, quality, line: self.line() }))
    }

    /// The line at which the reader stands.
    fn line(&self) -> u64 {
        self.record.position().map_or(0, csv::Position::line)
    }

    /// Where it stands, for messages.
    fn place(&self) -> String {
        format!("{}:{}", self.path.display(), self.line())
    }

    fn field(&self, column: usize) -> &str {
        self.places[column].and_then(|at| self.record.get(at)).unwrap_or_default()
    }

    fn wrong(&self, name: &str, column: usize, what: &str) -> Failure {
        Failure::could_not(format!("{}: {name} `{}`: {what}", self.place(), self.field(column)))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn read(text: &str) -> Result<Vec<(String, f64, String, String)>, String> {
        let mut file = LevelsFile::new(Path::new("x.csv"), text.as_bytes()).map_err(Failure::text)?;
        let mut all = Vec::new();
        while let Some(level) = file.next().map_err(Failure::text)? {
            let cable = format!("{}/{}", level.cable, level.band);
            all.push((cable, level.level_db, level.state.to_owned(), level.quality.to_string()));
        }
        Ok(all)
    }

    #[test]
    fn what_is_exported_is_read_and_less_is_enough() {
        let full = "time,cable,band,level,peak,peak_hz,state,quality\r\n\
                    2026-09-01T00:00:00Z,W12,ringing,40.25,45,2000000,running,uncertain: near floor\r\n";
        assert_eq!(
            read(full),
            Ok(vec![("W12/ringing".into(), 40.25, "running".into(), "uncertain: near floor".into())])
        );
        let least = "band,cable,level,time\nlow,W12,-3,2026-09-01T00:00:00+02:00\nlow,W12,,2026-09-01T00:01:00Z\n";
        assert_eq!(read(least), Ok(vec![("W12/low".into(), -3.0, "unknown".into(), "good: imported".into())]));
    }

    #[test]
    fn what_is_wrong_is_told_with_its_line() {
        for (text, expected) in [
            ("time,cable,band,levels\n", "no column `level`"),
            ("time,cable,band,level\nnow,W12,low,40\n", "x.csv:2: time `now`"),
            ("time,cable,band,level\n2026-09-01T00:00:00Z,W12,low,loud\n", "x.csv:2: level `loud`"),
            ("time,cable,band,level\n2026-09-01T00:00:00Z,W12,low,NaN\n", "x.csv:2: level `NaN`"),
            ("time,cable,band,level,quality\n2026-09-01T00:00:00Z,W12,low,4,fine\n", "quality `fine`"),
            ("time,cable,band,level\n2026-09-01T00:00:00Z,W12\n", "x.csv"),
        ] {
            let told = read(text).expect_err(text);
            assert!(told.contains(expected), "{expected}: {told}");
        }
    }
}
