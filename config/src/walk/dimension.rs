//! Quantities with their unit: what may stand behind the number, and what it is worth.

/// A physical dimension with the units in which it is written. More can be made where they are needed.
#[derive(Debug, PartialEq)]
pub struct Dimension {
    /// With its article, as in "`9 kOhm` is not a frequency".
    pub name: &'static str,
    /// How it is written, as in `9 kHz`.
    pub example: &'static str,
    /// The units, exactly as they are written, each with its worth in the base unit; from small to large.
    pub units: &'static [(&'static str, f64)],
    /// Other spellings of a unit that are understood: the spelling, and the unit as above.
    pub aliases: &'static [(&'static str, &'static str)],
}

/// Hertz.
pub static FREQUENCY: Dimension = Dimension {
    name: "a frequency",
    example: "9 kHz",
    units: &[("Hz", 1.0), ("kHz", 1e3), ("MHz", 1e6), ("GHz", 1e9)],
    aliases: &[],
};

/// Ohm, of resistances and impedances.
pub static RESISTANCE: Dimension = Dimension {
    name: "a resistance or impedance",
    example: "45 ohm",
    units: &[("mohm", 1e-3), ("ohm", 1.0), ("kohm", 1e3), ("Mohm", 1e6)],
    aliases: &[
        ("Ohm", "ohm"),
        ("kOhm", "kohm"),
        ("MOhm", "Mohm"),
        ("\u{3a9}", "ohm"),
        ("k\u{3a9}", "kohm"),
        ("\u{2126}", "ohm"),
        ("k\u{2126}", "kohm"),
    ],
};

/// Metres.
pub static LENGTH: Dimension = Dimension {
    name: "a length",
    example: "26 mm",
    units: &[("um", 1e-6), ("mm", 1e-3), ("cm", 1e-2), ("m", 1.0), ("km", 1e3)],
    aliases: &[("\u{b5}m", "um"), ("\u{3bc}m", "um")],
};

/// dB, a ratio: losses, gains, suppression.
pub static RATIO: Dimension = Dimension { name: "a ratio in dB", example: "6 dB", units: &[("dB", 1.0)], aliases: &[] };

/// dB(ohm): the factor of a current probe, voltage out over current through.
pub static FACTOR: Dimension = Dimension {
    name: "a current probe's factor",
    example: "12 dB(ohm)",
    units: &[("dB(ohm)", 1.0)],
    aliases: &[("dBohm", "dB(ohm)"), ("dB(\u{3a9})", "dB(ohm)"), ("dB\u{3a9}", "dB(ohm)")],
};

/// dB(S/m): the magnetic factor of a loop probe, field strength over voltage out.
pub static MAGNETIC_FACTOR: Dimension = Dimension {
    name: "a loop probe's magnetic factor",
    example: "20 dB(S/m)",
    units: &[("dB(S/m)", 1.0)],
    aliases: &[],
};

/// Why a text is no quantity of a dimension.
#[derive(Debug, PartialEq)]
pub(super) enum NoQuantity {
    /// It does not begin with a number.
    NoNumber,
    /// There is nothing behind the number.
    NoUnit,
    /// Something else stands behind the number; the unit that was probably meant.
    OtherUnit(Option<&'static str>),
    /// A decimal comma.
    Comma,
}

impl Dimension {
    /// The value of a text with its unit, in the base unit.
    pub fn value_of(&self, text: &str) -> Option<f64> {
        self.parse(text).ok().map(|(value, _)| value)
    }

    /// The value in the base unit, and the unit in which it was written (never an alias).
    pub(super) fn parse(&self, text: &str) -> Result<(f64, &'static str), NoQuantity> {
        let (number, unit) = split(text.trim()).ok_or(NoQuantity::NoNumber)?;
        if unit.is_empty() {
            return Err(NoQuantity::NoUnit);
        }
        if unit.starts_with(',') {
            return Err(NoQuantity::Comma);
        }
        let written = self.aliases.iter().find(|(alias, _)| *alias == unit).map_or(unit, |(_, unit)| unit);
        match self.units.iter().find(|(name, _)| *name == written) {
            // 26 mm are 26 / 1000 m, the nearest number to 0.026; 26 times 0.001 would be its neighbour.
            Some((name, worth)) if *worth < 1.0 => Ok((number / worth.recip().round(), name)),
            Some((name, worth)) => Ok((number * worth, name)),
            None => Err(NoQuantity::OtherUnit(self.same_but_for_case(unit))),
        }
    }

    /// A value in the base unit as it is written: in the largest unit of which it has at least one. Units that are
    /// no power of 1000 of the base unit are read but not written: the trade measures cores in mm, not in cm.
    pub fn write(&self, value: f64) -> String {
        let written = |worth: f64| (worth.log10() / 3.0).fract().abs() < 1e-9;
        let fitting =
            self.units.iter().rev().find(|(_, worth)| written(*worth) && value.abs() >= *worth * (1.0 - 1e-9));
        let base = self.units.iter().find(|(_, worth)| *worth == 1.0);
        let smallest = if value == 0.0 { base.or(self.units.first()) } else { self.units.first() };
        let (unit, worth) = fitting.or(smallest).copied().unwrap_or(("", 1.0));
        // Nine digits hide what the division leaves behind the last one that was written.
        let rounded: f64 = format!("{:.8e}", value / worth).parse().unwrap_or(value / worth);
        format!("{rounded} {unit}")
    }

    /// The one unit that differs in upper and lower case alone; `mhz` could be two things if both were units.
    fn same_but_for_case(&self, unit: &str) -> Option<&'static str> {
        let mut alike = self.units.iter().map(|(name, _)| *name).filter(|name| name.eq_ignore_ascii_case(unit));
        let first = alike.next();
        if alike.next().is_none() { first } else { None }
    }
}

/// The number at the start of the text and what follows it, without the space between them.
fn split(text: &str) -> Option<(f64, &str)> {
    if !text.starts_with(|first: char| first.is_ascii_digit() || matches!(first, '+' | '-' | '.')) {
        return None;
    }
    // The longest beginning that is a number: an `e` may be part of it. Numbers longer than this are no quantities.
    let longest = text.char_indices().map(|(at, letter)| at + letter.len_utf8()).take(40).collect::<Vec<_>>();
    longest.into_iter().rev().find_map(|end| {
        let number: f64 = text[..end].parse().ok()?;
        number.is_finite().then(|| (number, text[end..].trim()))
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn quantities_are_worth_their_unit() {
        for (dimension, text, wanted) in [
            (&FREQUENCY, "9 kHz", 9e3),
            (&FREQUENCY, "150kHz", 150e3),
            (&FREQUENCY, " 1.5e6 Hz ", 1.5e6),
            (&FREQUENCY, "0.15 MHz", 150e3),
            (&RESISTANCE, "45 ohm", 45.0),
            (&RESISTANCE, "1.2 k\u{3a9}", 1200.0),
            (&LENGTH, "26 mm", 0.026),
            (&LENGTH, "8 m", 8.0),
            (&RATIO, "-20 dB", -20.0),
            (&FACTOR, "+2.5 dB(ohm)", 2.5),
        ] {
            let (value, _) = dimension.parse(text).unwrap_or_else(|error| panic!("{text}: {error:?}"));
            assert_eq!(value, wanted, "{text}");
        }
    }

    #[test]
    fn what_is_none_says_why() {
        for (text, wanted) in [
            ("", NoQuantity::NoNumber),
            ("kHz", NoQuantity::NoNumber),
            ("inf Hz", NoQuantity::NoNumber),
            ("-inf Hz", NoQuantity::NoNumber),
            ("9", NoQuantity::NoUnit),
            ("9,5 kHz", NoQuantity::Comma),
            ("9 kOhm", NoQuantity::OtherUnit(None)),
            ("9 khz", NoQuantity::OtherUnit(Some("kHz"))),
            ("9 mHz", NoQuantity::OtherUnit(Some("MHz"))),
            ("9 kHz 3", NoQuantity::OtherUnit(None)),
        ] {
            assert_eq!(FREQUENCY.parse(text), Err(wanted), "{text}");
        }
    }

    #[test]
    fn values_are_written_in_a_fitting_unit() {
        assert_eq!(FREQUENCY.write(150e3), "150 kHz");
        assert_eq!(FREQUENCY.write(30e6), "30 MHz");
        assert_eq!(FREQUENCY.write(0.0), "0 Hz");
        assert_eq!(LENGTH.write(0.026), "26 mm");
        assert_eq!(LENGTH.write(0.0), "0 m");
        assert_eq!(RATIO.write(-0.5), "-0.5 dB");
    }
}
