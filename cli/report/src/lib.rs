//! Tables and charts for people, kept out of the service's build.
//!
//! [`Trend`] is the course of a level with what it is held against; it becomes a plot of characters ([`Trend::to_text`])
//! or a picture ([`Trend::to_svg`]). [`table`] lays rows out in columns. Nothing here knows the record, the clock or the
//! terminal: numbers, words and sizes come in, text goes out.

#![forbid(unsafe_code)]

mod picture;
mod plot;
mod spectrum;
mod table;
mod trend;

pub use plot::Size;
pub use spectrum::Spectrum;
pub use table::{Cell, table};
pub use trend::{Axis, Line, LineKind, Mark, MarkKind, Point, Tick, Trend};
