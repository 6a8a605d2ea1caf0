//! The same as a picture: SVG, by a plotting library behind this one module.

use std::sync::Arc;

use hushwatch_quantity::Time;
use kuva::plot::LinePlot;
use kuva::plot::legend::LegendPosition;
use kuva::render::annotations::{ReferenceLine, ShadedRegion};
use kuva::render::layout::{Layout, TickFormat};
use kuva::render::plots::Plot;

use crate::{LineKind, MarkKind, Trend};

/// Size of a picture, pixels.
const SIZE: (f64, f64) = (960.0, 420.0);

/// Colours that can be told apart with any colour vision (Okabe and Ito 2008; from memory).
mod color {
    pub(super) const LEVEL: &str = "#333333";
    pub(super) const BEFORE: &str = "#0072b2";
    pub(super) const AFTER: &str = "#009e73";
    pub(super) const LIMIT: &str = "#e69f00";
    pub(super) const REQUIREMENT: &str = "#cc79a7";
    pub(super) const ALARM: &str = "#d55e00";
    pub(super) const GAP: &str = "#999999";
}

fn color_of(kind: LineKind) -> &'static str {
    match kind {
        LineKind::Before => color::BEFORE,
        LineKind::After => color::AFTER,
        LineKind::Limit => color::LIMIT,
        LineKind::Requirement => color::REQUIREMENT,
    }
}

impl Trend {
    /// The trend as an SVG document.
    pub fn to_svg(&self) -> String {
        // The axis is counted in ticks, so that each whole number is one and has its label.
        let origin = self.axis.ticks.first().map_or(self.axis.from, |tick| tick.time);
        let step = match self.axis.ticks.as_slice() {
            [first, second, ..] => (second.time - first.time).as_secs_f64(),
            _ => (self.axis.to - self.axis.from).as_secs_f64(),
        };
        let x = |time: Time| (time - origin).as_secs_f64() / step.max(1e-6);
        let plots = self.plots(&x);
        let mut layout = Layout::auto_from_plots(&plots)
            .with_width(SIZE.0)
            .with_height(SIZE.1)
            .with_title(self.title.clone())
            .with_x_label(self.axis.caption.clone())
            .with_y_label(format!("level, {}", self.unit))
            .with_x_axis_min(x(self.axis.from))
            .with_x_axis_max(x(self.axis.to))
            .with_x_tick_step(1.0)
            .with_x_tick_format(self.tick_format())
            .with_legend_position(LegendPosition::InsideTopLeft)
            .with_clamp_axis();
        let (low, high) = self.range();
        layout = layout.with_y_axis_min(low).with_y_axis_max(high);
        for (from, to) in &self.gaps {
            let (from, to) = ((*from).max(self.axis.from), (*to).min(self.axis.to));
            if from < to {
                let mut region = ShadedRegion::vertical(x(from), x(to));
                color::GAP.clone_into(&mut region.color);
                layout = layout.with_shaded_region(region);
            }
        }
        for line in &self.lines {
            let label = format!("{} {:.1}", line.kind.label(), line.db);
            let line = ReferenceLine::horizontal(line.db).with_color(color_of(line.kind)).with_label(label);
            layout = layout.with_reference_line(line.with_stroke_width(1.5));
        }
        for mark in &self.marks {
            let color = match mark.kind {
                MarkKind::Since => color::LIMIT,
                MarkKind::Alarm => color::ALARM,
                MarkKind::Cleared => color::AFTER,
            };
            let line = ReferenceLine::vertical(x(mark.time)).with_color(color).with_stroke_width(1.5);
            layout = layout.with_reference_line(if mark.kind == MarkKind::Since {
                line
            } else {
                line.with_label(mark.label.clone())
            });
        }
        kuva::render_to_svg(plots, layout)
    }

    /// One line for each unbroken piece: over a gap nothing is drawn.
    fn plots(&self, x: &impl Fn(Time) -> f64) -> Vec<Plot> {
        let piece = |points: &Vec<crate::Point>| {
            let finite = points.iter().filter(|point| point.db.is_finite());
            let data: Vec<(f64, f64)> = finite.map(|point| (x(point.time), point.db)).collect();
            Plot::from(LinePlot::new().with_data(data).with_color(color::LEVEL).with_stroke_width(1.2))
        };
        self.pieces.iter().filter(|points| !points.is_empty()).map(piece).collect()
    }

    fn tick_format(&self) -> TickFormat {
        let labels: Vec<String> = self.axis.ticks.iter().map(|tick| tick.label.clone()).collect();
        TickFormat::Custom(Arc::new(move |x| {
            let whole = x.round();
            let at = if whole >= 0.0 && (x - whole).abs() < 1e-6 { labels.get(whole as usize) } else { None };
            at.cloned().unwrap_or_default()
        }))
    }
}

#[cfg(test)]
mod tests {
    use hushwatch_quantity::Span;

    use super::*;
    use crate::{Axis, Line, Mark, Point, Tick};

    #[test]
    fn the_picture_has_a_line_for_each_piece_and_every_label() {
        let at = |hours: i64| Time::from_secs(0) + Span::from_hours(hours);
        let piece = |from: i64| (from..from + 20).map(|h| Point { time: at(h), db: 40.0 + h as f64 / 10.0 }).collect();
        let trend = Trend {
            title: "W12 ringing".into(),
            unit: "dB(uA)".into(),
            axis: Axis {
                from: at(-3),
                to: at(75),
                ticks: (0..4).map(|n| Tick { time: at(24 * n), label: format!("09-{:02}", n + 1) }).collect(),
                caption: "2026, UTC".into(),
            },
            pieces: vec![piece(0), piece(30), Vec::new()],
            lines: vec![Line { kind: LineKind::After, db: 40.0 }],
            marks: vec![Mark { time: at(40), kind: MarkKind::Alarm, label: "regression".into() }],
            gaps: vec![(at(20), at(30))],
        };
        let svg = trend.to_svg();
        assert!(svg.starts_with("<svg") && svg.trim_end().ends_with("</svg>"), "{svg}");
        for word in ["W12 ringing", "dB(uA)", "09-01", "09-03", "after the fix 40.0", "regression", "2026, UTC"] {
            assert!(svg.contains(word), "{word} is missing");
        }
        assert_eq!(svg.matches(color::LEVEL).count(), 2, "two pieces");
        assert!(!svg.contains("NaN"));
    }
}
