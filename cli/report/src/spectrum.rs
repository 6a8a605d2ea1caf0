//! A spectrum as a plot of characters.

use ratatui::style::Color;
use ratatui::symbols::Marker;
use ratatui::widgets::canvas::{Canvas, Line as Stroke};

use crate::plot::{MARGIN, Size, rendered};

/// From this ratio of last to first frequency on, frequencies are shown by their logarithm.
const LOGARITHMIC_FROM: f64 = 4.0;

/// Levels over frequency.
#[derive(Clone, Debug, Default)]
pub struct Spectrum {
    /// What it is, in one line.
    pub title: String,
    /// Unit of the levels, as it is written.
    pub unit: String,
    /// Frequency, Hz, rising, and level; a level that is no number leaves a hole.
    pub points: Vec<(f64, f64)>,
    /// Frequencies that matter, Hz.
    pub marks: Vec<f64>,
}

impl Spectrum {
    /// The spectrum as lines of text.
    pub fn to_text(&self, size: Size) -> String {
        let width = size.width.clamp(40, 400).saturating_sub(MARGIN);
        let height = size.height.clamp(10, 200).saturating_sub(4);
        let finite = || self.points.iter().filter(|(_, db)| db.is_finite());
        let (Some(first), Some(last)) = (self.points.first(), self.points.last()) else {
            return format!("{}\nnothing was measured\n", self.title);
        };
        let low = finite().map(|(_, db)| *db).fold(f64::INFINITY, f64::min);
        let high = finite().map(|(_, db)| *db).fold(f64::NEG_INFINITY, f64::max);
        let (low, high) = if low > high { (0.0, 1.0) } else { ((low - 1.0).floor(), (high + 1.0).ceil()) };
        let logarithmic = last.0 / first.0.max(1.0) >= LOGARITHMIC_FROM;
        let place = |hz: f64| {
            if logarithmic {
                (hz / first.0).ln() / (last.0 / first.0).ln()
            } else {
                (hz - first.0) / (last.0 - first.0)
            }
        };
        let canvas =
            Canvas::default().marker(Marker::Braille).x_bounds([0.0, 1.0]).y_bounds([low, high]).paint(|context| {
                for hz in &self.marks {
                    let x = place(*hz);
                    context.draw(&Stroke { x1: x, y1: low, x2: x, y2: high, color: Color::Yellow });
                }
                context.layer();
                for pair in self.points.windows(2).filter(|pair| pair.iter().all(|(_, db)| db.is_finite())) {
                    let [(from, y1), (to, y2)] = [pair[0], pair[1]];
                    context.draw(&Stroke { x1: place(from), y1, x2: place(to), y2, color: Color::Reset });
                }
            });
        let mut text = format!("{}\n", self.title);
        text.push_str(&rendered(canvas, (width, height), (low, high)));
        let width = usize::from(width);
        let mut labels = vec![' '; width + usize::from(MARGIN)];
        for share in [0.0, 0.25, 0.5, 0.75, 1.0] {
            let ratio = last.0 / first.0;
            let hz = if logarithmic { first.0 * ratio.powf(share) } else { first.0 + (last.0 - first.0) * share };
            let label = format!("{:.2} MHz", hz / 1e6);
            let length = label.chars().count();
            let middle = usize::from(MARGIN) + (share * (width - 1) as f64) as usize;
            let from = middle.saturating_sub(length / 2).min(labels.len() - length);
            for (at, character) in label.chars().enumerate() {
                labels[from + at] = character;
            }
        }
        let labels: String = labels.into_iter().collect();
        text.push_str(&format!("{:>6} \u{2514}{}\n{}\n", self.unit, "\u{2500}".repeat(width), labels.trim_end()));
        text
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_line_in_the_middle_stands_in_the_middle() {
        let points = (0..=100).map(|n| (1e6 + 1e4 * f64::from(n), if n == 50 { 60.0 } else { 20.0 })).collect();
        let spectrum = Spectrum { title: "input 1".into(), unit: "dB(uV)".into(), points, marks: vec![1.2e6] };
        let text = spectrum.to_text(Size { width: 88, height: 20 });
        let top = text.lines().find(|line| line.chars().any(|c| c > '\u{2800}' && c != '\u{2847}')).expect("a peak");
        assert!(text.contains("1.50 MHz") && text.contains("dB(uV)"), "{text}");
        assert!(text.lines().count() <= 20 && top.contains('\u{2502}'), "{text}");
    }

    #[test]
    fn nothing_measured_is_said() {
        assert!(Spectrum::default().to_text(Size { width: 80, height: 20 }).contains("nothing was measured"));
        let holes = Spectrum { points: vec![(1e6, f64::NAN), (2e6, f64::NAN)], ..Spectrum::default() };
        assert!(holes.to_text(Size { width: 80, height: 20 }).lines().count() > 5);
    }
}
