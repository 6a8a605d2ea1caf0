//! Commands with gaps to fill in.

use core::fmt;

use thiserror::Error;

/// What may be filled into a command, written in braces: `FREQ:STAR {start_hz}`.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Quantity {
    /// First frequency, Hz.
    StartHz,
    /// Last frequency, Hz.
    StopHz,
    /// Middle frequency, Hz.
    CenterHz,
    /// Last less first frequency, Hz.
    SpanHz,
    /// Number of points.
    Points,
    /// Resolution bandwidth, Hz.
    RbwHz,
    /// Shape of the resolution filter, as the word of the site file or of the setting's `words`.
    BandwidthShape,
    /// Video bandwidth, Hz.
    VbwHz,
    /// Detector, as the word of the site file or of the setting's `words`.
    Detector,
    /// Time spent on one point, s.
    DwellS,
    /// Time of one sweep: points times dwell, s.
    SweepS,
    /// Input attenuation, dB.
    AttenuationDb,
    /// Unit of the answer, `dBm` or `dB(uV)`, or the word for it of the setting's `words`.
    Unit,
    /// Number of the input.
    Input,
}

impl Quantity {
    /// All of them, in the order of their documentation.
    pub const ALL: [Self; 14] = [
        Self::StartHz,
        Self::StopHz,
        Self::CenterHz,
        Self::SpanHz,
        Self::Points,
        Self::RbwHz,
        Self::BandwidthShape,
        Self::VbwHz,
        Self::Detector,
        Self::DwellS,
        Self::SweepS,
        Self::AttenuationDb,
        Self::Unit,
        Self::Input,
    ];

    /// The names of all, in the same order.
    pub const LABELS: [&'static str; 14] = [
        "start_hz",
        "stop_hz",
        "center_hz",
        "span_hz",
        "points",
        "rbw_hz",
        "bandwidth_shape",
        "vbw_hz",
        "detector",
        "dwell_s",
        "sweep_s",
        "attenuation_db",
        "unit",
        "input",
    ];

    /// Its name, as it stands in braces.
    pub fn label(self) -> &'static str {
        Self::LABELS[self as usize]
    }

    /// What has this name.
    pub fn from_label(label: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|quantity| quantity.label() == label)
    }
}

impl fmt::Display for Quantity {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.label())
    }
}

/// A command with gaps: text, and quantities in braces. A brace itself is written twice.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Template {
    pieces: Vec<Piece>,
}

#[derive(Clone, Debug, PartialEq, Eq)]
enum Piece {
    Text(String),
    Gap(Quantity),
}

/// Why a text is no template. Places are bytes of the text.
#[derive(Clone, Debug, PartialEq, Eq, Error)]
pub enum TemplateError {
    /// A name in braces that is none of the quantities.
    #[error("unknown placeholder `{{{name}}}`")]
    Unknown {
        /// The name.
        name: String,
        /// Where its brace opens.
        at: usize,
    },
    /// A brace that is not opened or not closed.
    #[error("a brace without its partner; a brace itself is written twice")]
    Brace {
        /// Where it stands.
        at: usize,
    },
    /// A control character: it would end the line or worse.
    #[error("a control character in a command")]
    Control {
        /// Where it stands.
        at: usize,
    },
    /// Nothing at all.
    #[error("an empty command")]
    Empty,
}

impl Template {
    /// Reads a template.
    ///
    /// # Errors
    /// An unknown placeholder, a brace without its partner, a control character, or nothing at all.
    pub fn parse(text: &str) -> Result<Self, TemplateError> {
        if text.trim().is_empty() {
            return Err(TemplateError::Empty);
        }
        if let Some(at) = text.find(char::is_control) {
            return Err(TemplateError::Control { at });
        }
        let mut pieces = Vec::new();
        let mut plain = String::new();
        let mut at = 0;
        while let Some(character) = text[at..].chars().next() {
            let rest = &text[at..];
            if rest.starts_with("{{") || rest.starts_with("}}") {
                plain.push(character);
                at += 2;
            } else if character == '{' {
                let close = rest.find('}').ok_or(TemplateError::Brace { at })?;
                let name = &rest[1..close];
                let quantity =
                    Quantity::from_label(name).ok_or_else(|| TemplateError::Unknown { name: name.to_owned(), at })?;
                if !plain.is_empty() {
                    pieces.push(Piece::Text(std::mem::take(&mut plain)));
                }
                pieces.push(Piece::Gap(quantity));
                at += close + 1;
            } else if character == '}' {
                return Err(TemplateError::Brace { at });
            } else {
                plain.push(character);
                at += character.len_utf8();
            }
        }
        if !plain.is_empty() {
            pieces.push(Piece::Text(plain));
        }
        Ok(Self { pieces })
    }

    /// The quantities that it asks for, in the order of the text.
    pub fn quantities(&self) -> impl Iterator<Item = Quantity> {
        self.pieces.iter().filter_map(|piece| match piece {
            Piece::Gap(quantity) => Some(*quantity),
            Piece::Text(_) => None,
        })
    }

    /// The command, with what `value` says in the gaps.
    ///
    /// # Errors
    /// The quantity for which `value` has nothing.
    pub fn fill(&self, value: impl Fn(Quantity) -> Option<String>) -> Result<String, Quantity> {
        let mut command = String::new();
        for piece in &self.pieces {
            match piece {
                Piece::Text(text) => command.push_str(text),
                Piece::Gap(quantity) => command.push_str(&value(*quantity).ok_or(*quantity)?),
            }
        }
        Ok(command)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn labels_stand_in_the_order_of_the_quantities() {
        for quantity in Quantity::ALL {
            assert_eq!(Quantity::from_label(quantity.label()), Some(quantity));
        }
        assert_eq!(Quantity::StartHz.label(), "start_hz");
        assert_eq!(Quantity::Input.label(), "input");
    }

    #[test]
    fn gaps_are_filled() {
        let template = Template::parse("ROUT:CLOS (@{input}) {{x}} {unit}").expect("a template");
        let filled = template.fill(|quantity| match quantity {
            Quantity::Input => Some("3".to_owned()),
            Quantity::Unit => Some("DBM".to_owned()),
            _ => None,
        });
        assert_eq!(filled.as_deref(), Ok("ROUT:CLOS (@3) {x} DBM"));
        assert_eq!(template.quantities().collect::<Vec<_>>(), [Quantity::Input, Quantity::Unit]);
        assert_eq!(template.fill(|_| None), Err(Quantity::Input));
    }

    #[test]
    fn faults_tell_their_place() {
        for (text, error) in [
            ("", TemplateError::Empty),
            ("  ", TemplateError::Empty),
            ("A {start}", TemplateError::Unknown { name: "start".to_owned(), at: 2 }),
            ("A {start_hz", TemplateError::Brace { at: 2 }),
            ("A } B", TemplateError::Brace { at: 2 }),
            ("A\nB", TemplateError::Control { at: 1 }),
        ] {
            assert_eq!(Template::parse(text), Err(error), "{text:?}");
        }
    }
}
