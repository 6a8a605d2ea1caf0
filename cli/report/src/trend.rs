//! The course of a level over time, with what it is held against.

use hushwatch_quantity::Time;

/// The course of a level.
#[derive(Clone, Debug, Default)]
pub struct Trend {
    /// What it is, in one line.
    pub title: String,
    /// Unit of the levels, as it is written.
    pub unit: String,
    /// The time that is shown.
    pub axis: Axis,
    /// The levels, oldest first. Between two pieces nothing was measured.
    pub pieces: Vec<Vec<Point>>,
    /// Levels to hold it against.
    pub lines: Vec<Line>,
    /// Instants that matter.
    pub marks: Vec<Mark>,
    /// Intervals without levels.
    pub gaps: Vec<(Time, Time)>,
}

/// A level at a time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Point {
    /// When.
    pub time: Time,
    /// The level, dB.
    pub db: f64,
}

/// The time that is shown.
#[derive(Clone, Debug)]
pub struct Axis {
    /// From here ...
    pub from: Time,
    /// ... to here.
    pub to: Time,
    /// Where the axis is labelled, in order.
    pub ticks: Vec<Tick>,
    /// What the labels mean (the zone).
    pub caption: String,
}

impl Default for Axis {
    fn default() -> Self {
        Self { from: Time::from_micros(0), to: Time::from_micros(1), ticks: Vec::new(), caption: String::new() }
    }
}

impl Axis {
    /// Where a time lies, 0 at the beginning and 1 at the end.
    pub(crate) fn share(&self, time: Time) -> f64 {
        (time - self.from).as_secs_f64() / (self.to - self.from).as_secs_f64().max(1e-6)
    }
}

/// A label of the axis.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Tick {
    /// Where.
    pub time: Time,
    /// The label.
    pub label: String,
}

/// A level to hold the course against.
#[derive(Clone, Debug, PartialEq)]
pub struct Line {
    /// What it is.
    pub kind: LineKind,
    /// The level, dB.
    pub db: f64,
}

/// What a level to hold against is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum LineKind {
    /// The reference before the fix.
    Before,
    /// The reference after the fix.
    After,
    /// The reference after the fix, risen by what is one too much.
    Limit,
    /// What the required suppression leaves.
    Requirement,
}

impl LineKind {
    /// All kinds, in the order of the legend.
    pub const ALL: [Self; 4] = [Self::Before, Self::After, Self::Limit, Self::Requirement];

    /// As it stands in the legend.
    pub fn label(self) -> &'static str {
        match self {
            Self::Before => "before the fix",
            Self::After => "after the fix",
            Self::Limit => "max rise",
            Self::Requirement => "requirement",
        }
    }
}

/// An instant that matters.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Mark {
    /// When.
    pub time: Time,
    /// What happened.
    pub kind: MarkKind,
    /// In a few words.
    pub label: String,
}

/// What happened at an instant.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum MarkKind {
    /// Since then the level is too high.
    Since,
    /// Then it was told.
    Alarm,
    /// Then it was over.
    Cleared,
}

impl Trend {
    /// The least and the greatest level that must be shown, with room around them: 4 dB at least.
    pub(crate) fn range(&self) -> (f64, f64) {
        let points = self.pieces.iter().flatten().map(|point| point.db);
        let all = points.chain(self.lines.iter().map(|line| line.db));
        let (low, high) = all.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), db| (low.min(db), high.max(db)));
        if low > high {
            return (0.0, 1.0);
        }
        let (low, high) = ((low - 0.5).floor(), (high + 0.5).ceil());
        if high - low < 4.0 { (low - 2.0, high + 2.0) } else { (low, high) }
    }

    /// The kinds of lines that are there, in the order of the legend.
    pub(crate) fn kinds(&self) -> impl Iterator<Item = LineKind> {
        LineKind::ALL.into_iter().filter(|kind| self.lines.iter().any(|line| line.kind == *kind))
    }
}
