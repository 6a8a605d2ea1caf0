//! A plot of characters.

use anstyle::{AnsiColor, Style};
use ratatui::buffer::Buffer;
use ratatui::layout::Rect;
use ratatui::style::Color;
use ratatui::symbols::Marker;
use ratatui::widgets::Widget;
use ratatui::widgets::canvas::{Canvas, Context, Line as Stroke, Points};

use crate::{LineKind, MarkKind, Trend};

/// Room that a plot may take, characters.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Size {
    /// Across.
    pub width: u16,
    /// Down, with title, axis and legend.
    pub height: u16,
}

/// Characters left of the plot: a level and the axis.
pub(crate) const MARGIN: u16 = 8;
/// Lines that are not plot, beside one for each mark: title, axis, labels, legend.
const AROUND: u16 = 4;

fn color_of(kind: LineKind) -> Color {
    match kind {
        LineKind::Before => Color::Blue,
        LineKind::After => Color::Green,
        LineKind::Limit => Color::Yellow,
        LineKind::Requirement => Color::Magenta,
    }
}

impl Trend {
    /// The trend as lines of text. Colours are written as escape sequences; without them the legend's words and signs
    /// still tell everything apart.
    pub fn to_text(&self, size: Size) -> String {
        let width = size.width.clamp(40, 400).saturating_sub(MARGIN);
        let around = AROUND + u16::try_from(self.marks.len()).unwrap_or(u16::MAX / 2);
        let height = size.height.clamp(12, 200).saturating_sub(around).max(6);
        let (low, high) = self.range();
        let canvas = Canvas::default()
            .marker(Marker::Braille)
            .x_bounds([0.0, 1.0])
            .y_bounds([low, high])
            .paint(|context| self.draw(context));
        let mut text = format!("{}\n", self.title);
        text.push_str(&rendered(canvas, (width, height), (low, high)));
        text.push_str(&self.time_axis(usize::from(width)));
        text.push_str(&self.legend());
        text
    }

    fn draw(&self, context: &mut Context<'_>) {
        let (low, high) = self.range();
        for line in &self.lines {
            let color = color_of(line.kind);
            // Dotted, so that levels upon it still show.
            let dots: Vec<(f64, f64)> = (0..80).map(|n| (f64::from(n) / 80.0, line.db)).collect();
            context.draw(&Points { coords: &dots, color });
        }
        for mark in &self.marks {
            let x = self.axis.share(mark.time);
            let color = match mark.kind {
                MarkKind::Since => Color::Yellow,
                MarkKind::Alarm => Color::Red,
                MarkKind::Cleared => Color::Green,
            };
            context.draw(&Stroke { x1: x, y1: low, x2: x, y2: high, color });
        }
        context.layer();
        let levels: Vec<(f64, f64)> =
            self.pieces.iter().flatten().map(|point| (self.axis.share(point.time), point.db)).collect();
        context.draw(&Points { coords: &levels, color: Color::Reset });
    }

    /// The axis with its ticks, and the labels below them as far as there is room.
    fn time_axis(&self, width: usize) -> String {
        let mut axis = vec!['\u{2500}'; width];
        let mut labels = vec![' '; width + usize::from(MARGIN)];
        let mut free = 0;
        for tick in &self.axis.ticks {
            let share = self.axis.share(tick.time);
            if !(0.0..1.0).contains(&share) {
                continue;
            }
            let at = (share * width as f64) as usize;
            axis[at] = '\u{252c}';
            let length = tick.label.chars().count();
            let from = (at + usize::from(MARGIN)).saturating_sub(length / 2);
            if from >= free && from + length <= labels.len() {
                for (place, character) in tick.label.chars().enumerate() {
                    labels[from + place] = character;
                }
                free = from + length + 2;
            }
        }
        let axis: String = axis.into_iter().collect();
        let labels: String = labels.into_iter().collect();
        format!("{:>6} \u{2514}{axis}\n{}\n", self.unit_short(), labels.trim_end())
    }

    fn unit_short(&self) -> &str {
        if self.unit.len() <= 6 { &self.unit } else { "dB" }
    }

    fn legend(&self) -> String {
        let mut words: Vec<String> = self
            .lines
            .iter()
            .filter(|line| self.kinds().any(|kind| kind == line.kind))
            .map(|line| {
                let style = ansi(color_of(line.kind));
                format!("{style}\u{2508}\u{2508}{style:#} {} {:.1}", line.kind.label(), line.db)
            })
            .collect();
        words.dedup();
        let lines = words.join("   ");
        let marks: Vec<String> = self
            .marks
            .iter()
            .map(|mark| {
                let color = match mark.kind {
                    MarkKind::Since => Color::Yellow,
                    MarkKind::Alarm => Color::Red,
                    MarkKind::Cleared => Color::Green,
                };
                let style = ansi(color);
                format!("{style}\u{2502}{style:#} {}", mark.label)
            })
            .collect();
        let mut text = format!("        {} {}\n", lines, self.axis.caption);
        for mark in marks {
            text.push_str(&format!("        {mark}\n"));
        }
        text
    }
}

/// A canvas as rows of text, with levels written beside it.
pub(crate) fn rendered(canvas: impl Widget, (width, height): (u16, u16), (low, high): (f64, f64)) -> String {
    let area = Rect::new(0, 0, width, height);
    let mut buffer = Buffer::empty(area);
    canvas.render(area, &mut buffer);
    let mut text = String::new();
    for row in 0..height {
        let label = level_label(row, height, low, high);
        text.push_str(&format!("{label:>6} \u{2502}"));
        text.push_str(painted(&buffer, row, width).trim_end());
        text.push('\n');
    }
    text
}

/// The level at a row, on every fourth.
fn level_label(row: u16, height: u16, low: f64, high: f64) -> String {
    if !(height - 1 - row).is_multiple_of(4) {
        return String::new();
    }
    let share = (f64::from(height - 1 - row) + 0.5) / f64::from(height);
    format!("{:.1}", low + share * (high - low))
}

/// A row of the plot with its colours.
fn painted(buffer: &Buffer, row: u16, width: u16) -> String {
    let mut text = String::new();
    let mut current = Color::Reset;
    for column in 0..width {
        let Some(cell) = buffer.cell((column, row)) else { continue };
        // Blank braille is a blank: trailing ones are cut off.
        let symbol = if cell.symbol() == "\u{2800}" { " " } else { cell.symbol() };
        if cell.fg != current && symbol != " " {
            if current != Color::Reset {
                text.push_str(&format!("{:#}", ansi(current)));
            }
            text.push_str(&ansi(cell.fg).to_string());
            current = cell.fg;
        }
        text.push_str(symbol);
    }
    if current != Color::Reset {
        text = format!("{}{:#}", text.trim_end(), ansi(current));
    }
    text
}

fn ansi(color: Color) -> Style {
    let color = match color {
        Color::Blue => AnsiColor::Blue,
        Color::Green => AnsiColor::Green,
        Color::Yellow => AnsiColor::Yellow,
        Color::Magenta => AnsiColor::Magenta,
        Color::Red => AnsiColor::Red,
        _ => return Style::new(),
    };
    color.on_default()
}

#[cfg(test)]
mod tests {
    use hushwatch_quantity::{Span, Time};

    use super::*;
    use crate::{Axis, Line, Mark, Point, Tick};

    fn trend() -> Trend {
        let from = Time::from_secs(0);
        let at = |hours: i64| from + Span::from_hours(hours);
        let piece = |hours: core::ops::Range<i64>, db: f64| hours.map(|h| Point { time: at(h), db }).collect();
        Trend {
            title: "W12 ringing, running".into(),
            unit: "dB(uA)".into(),
            axis: Axis {
                from,
                to: at(100),
                ticks: (0..4).map(|n| Tick { time: at(24 * n), label: format!("day {n}") }).collect(),
                caption: "UTC".into(),
            },
            pieces: vec![piece(0..60, 40.0), piece(60..100, 46.0)],
            lines: vec![Line { kind: LineKind::Before, db: 49.0 }, Line { kind: LineKind::After, db: 41.5 }],
            marks: vec![Mark { time: at(60), kind: MarkKind::Since, label: "too high since".into() }],
            gaps: Vec::new(),
        }
    }

    #[test]
    fn the_plot_fits_its_size_and_shows_where_the_level_lies() {
        let text = trend().to_text(Size { width: 80, height: 24 });
        let plain = strip(&text);
        assert!(plain.lines().all(|line| line.chars().count() <= 80), "{plain}");
        assert!(plain.lines().count() <= 24, "{plain}");
        // The level lies low at the left and high at the right.
        let rows: Vec<&str> = plain.lines().filter(|line| line.contains('\u{2502}')).collect();
        let first = |from: usize, to: usize| {
            rows.iter().rposition(|row| {
                row.chars().skip(8 + from).take(to - from).filter(|c| *c > '\u{2800}').count() >= to - from
            })
        };
        assert!(first(2, 40).expect("a low level") > first(46, 70).expect("a high level"), "{plain}");
        for word in
            ["W12 ringing, running", "before the fix 49.0", "after the fix 41.5", "too high since", "day 1", "UTC"]
        {
            assert!(plain.contains(word), "{word}:\n{plain}");
        }
    }

    #[test]
    fn nothing_to_show_is_no_accident() {
        let text = Trend::default().to_text(Size { width: 0, height: 0 });
        assert!(text.lines().count() >= 5, "{text}");
    }

    /// Text without its escape sequences.
    fn strip(text: &str) -> String {
        let mut out = String::new();
        let mut inside = false;
        for character in text.chars() {
            match (inside, character) {
                (false, '\u{1b}') => inside = true,
                (true, 'm') => inside = false,
                (true, _) => {}
                (false, other) => out.push(other),
            }
        }
        out
    }
}
