//! What an answer says: numbers from text and from binary values, errors of the queue.
//!
//! Pure and total: any bytes give a value or an error, never a panic. Numbers are those of IEEE 488.2, 8.7.2 to 8.7.4
//! (NR1, NR2, NR3), and its relaxed forms (`.5`, `5.`, `1e3`, blanks around). SCPI-99 volume 1, 7.2.1.4 and 7.2.1.5,
//! reserves 9.91E37 for "not a number" and +-9.9E37 for infinity; both are points that were not measured: NaN here.

use thiserror::Error;

use crate::error::readable;

/// SCPI's "not a number".
const SCPI_NAN: f64 = 9.91e37;
/// SCPI's infinity, with either sign.
const SCPI_INFINITY: f64 = 9.9e37;
/// As a number of 4 bytes it comes back rounded.
const SCPI_TOLERANCE: f64 = 1e-6;
/// No receiver tells a level beyond this, dB over whatever.
const GREATEST_LEVEL: f64 = 1000.0;
/// A level in dB that is so small without being zero comes from bytes in the wrong order, not from a receiver.
const SMALLEST_LEVEL: f64 = 1e-12;

/// Why an answer does not say what was asked.
#[derive(Clone, Debug, PartialEq, Error)]
pub enum AnswerError {
    /// Another number of values than was asked for: a short trace is no sweep.
    #[error("{got} values came where {expected} were asked for")]
    WrongCount {
        /// What came.
        got: usize,
        /// What was asked for.
        expected: usize,
    },
    /// A value of a list is no number.
    #[error("value {} is no number: `{text}`", index + 1)]
    NotANumber {
        /// Its place, counted from 0.
        index: usize,
        /// What stands there.
        text: String,
    },
    /// The bytes of a block are not a whole number of values.
    #[error("a block of {bytes} bytes is not a whole number of values of {size} bytes")]
    PartOfAValue {
        /// Bytes of the block.
        bytes: usize,
        /// Bytes of a value.
        size: usize,
    },
    /// A value that no receiver tells.
    #[error("value {} is {value:e}, which is no level: are the bytes in the right order?", index + 1)]
    NoLevel {
        /// Its place, counted from 0.
        index: usize,
        /// The value.
        value: f64,
    },
    /// A text was asked for and a block came, or the other way round, or something else.
    #[error("{expected} was expected, not `{got}`")]
    Unexpected {
        /// What was expected, in words.
        expected: &'static str,
        /// What came.
        got: String,
    },
}

/// The byte order of binary values.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Order {
    /// The most significant byte first: SCPI's `NORMal`.
    Big,
    /// The least significant byte first: SCPI's `SWAPped`.
    Little,
}

/// One number of IEEE 488.2 with blanks around it; words such as `inf` are none.
pub fn number(text: &[u8]) -> Option<f64> {
    let text = text.trim_ascii();
    // What is left of the letters that `f64` takes are those of an exponent.
    let plain = text.iter().all(|byte| matches!(byte, b'0'..=b'9' | b'+' | b'-' | b'.' | b'e' | b'E'));
    if !plain {
        return None;
    }
    str::from_utf8(text).ok()?.parse().ok()
}

/// The levels of a trace from a list of numbers with commas between them, NaN where nothing was measured.
///
/// # Errors
/// Not `expected` values, or a value that is no number or no level.
pub fn levels_from_text(text: &[u8], expected: usize) -> Result<Vec<f64>, AnswerError> {
    let got = if text.trim_ascii().is_empty() { 0 } else { text.split(|byte| *byte == b',').count() };
    if got != expected {
        return Err(AnswerError::WrongCount { got, expected });
    }
    if expected == 0 {
        return Ok(Vec::new());
    }
    let mut levels = Vec::with_capacity(expected);
    for (index, part) in text.split(|byte| *byte == b',').enumerate() {
        let value = number(part).ok_or_else(|| AnswerError::NotANumber { index, text: readable(part) })?;
        levels.push(level(index, value)?);
    }
    Ok(levels)
}

/// The levels of a trace from IEEE 754 numbers of 4 bytes, NaN where nothing was measured.
///
/// # Errors
/// Not `expected` values, or a value that is no level.
pub fn levels_from_real32(payload: &[u8], order: Order, expected: usize) -> Result<Vec<f64>, AnswerError> {
    let (values, rest) = payload.as_chunks::<4>();
    if !rest.is_empty() {
        return Err(AnswerError::PartOfAValue { bytes: payload.len(), size: 4 });
    }
    if values.len() != expected {
        return Err(AnswerError::WrongCount { got: values.len(), expected });
    }
    let real = |bytes: [u8; 4]| match order {
        Order::Big => f32::from_be_bytes(bytes),
        Order::Little => f32::from_le_bytes(bytes),
    };
    values.iter().enumerate().map(|(index, bytes)| level(index, f64::from(real(*bytes)))).collect()
}

fn level(index: usize, value: f64) -> Result<f64, AnswerError> {
    let near = |wanted: f64| (value.abs() - wanted).abs() <= SCPI_TOLERANCE * wanted;
    if !value.is_finite() || near(SCPI_NAN) || near(SCPI_INFINITY) {
        return Ok(f64::NAN);
    }
    if value.abs() > GREATEST_LEVEL || (value != 0.0 && value.abs() < SMALLEST_LEVEL) {
        return Err(AnswerError::NoLevel { index, value });
    }
    Ok(value)
}

/// An entry of the error queue.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct DeviceError {
    /// Its number; those of SCPI are negative, those of a maker positive.
    pub number: i64,
    /// Its text, without the quotes.
    pub text: String,
}

impl core::fmt::Display for DeviceError {
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        write!(f, "{} {}", self.number, self.text)
    }
}

/// An entry of the error queue, `number,"text"`. The comma must be there: a bare number is the answer to something
/// else that came late.
///
/// # Errors
/// It is no such entry.
pub fn device_error(line: &[u8]) -> Result<DeviceError, AnswerError> {
    let unexpected =
        || AnswerError::Unexpected { expected: "an entry of the error queue, number,\"text\"", got: readable(line) };
    let text = str::from_utf8(line).map_err(|_| unexpected())?;
    let (number, text) = text.split_once(',').ok_or_else(unexpected)?;
    let number = number.trim().parse().map_err(|_| unexpected())?;
    let text = text.trim();
    let quoted = text.strip_prefix('"').and_then(|text| text.strip_suffix('"'));
    match quoted {
        // A quote inside of a string is written twice (IEEE 488.2, 8.7.8).
        Some(text) => Ok(DeviceError { number, text: text.replace("\"\"", "\"") }),
        // Some devices leave the quotes out. Words there must be, else it is a list of numbers.
        None if text.contains(char::is_alphabetic) && self::number(text.as_bytes()).is_none() => {
            Ok(DeviceError { number, text: text.to_owned() })
        }
        None => Err(unexpected()),
    }
}

/// Is this an answer by which an instrument tells who it is? With `fields`, so many must be there; words in it are
/// what tells it from a late list of numbers.
///
/// # Errors
/// It is none.
pub fn identity(line: &[u8], fields: Option<usize>) -> Result<String, AnswerError> {
    let unexpected = || AnswerError::Unexpected { expected: "an identity", got: readable(line) };
    let text = str::from_utf8(line).map_err(|_| unexpected())?.trim();
    let parts: Vec<&str> = text.split(',').collect();
    let lettered = parts.iter().any(|part| number(part.as_bytes()).is_none() && part.contains(char::is_alphabetic));
    let error_entry = device_error(line).is_ok();
    let readable_text = !text.chars().any(char::is_control);
    if lettered && !error_entry && readable_text && fields.is_none_or(|fields| parts.len() == fields) {
        Ok(text.to_owned())
    } else {
        Err(unexpected())
    }
}

/// Does the device's `got` say what was `asked` for? Words may come in the long form where the short one was asked
/// for, in any case, in quotes; fields are separated by commas, and further fields may follow.
pub fn same_words(asked: &str, got: &str) -> bool {
    let got = got.trim().trim_matches(['"', '\'']);
    let mut got = got.split(',').map(str::trim);
    asked.split(',').map(str::trim).all(|asked| got.next().is_some_and(|got| same_word(asked, got)))
}

fn same_word(asked: &str, got: &str) -> bool {
    if let (Some(asked), Some(got)) = (number(asked.as_bytes()), number(got.as_bytes())) {
        return asked == got;
    }
    asked.eq_ignore_ascii_case(got) || short_form(asked).eq_ignore_ascii_case(short_form(got))
}

/// The short form of a SCPI mnemonic: four letters, three if the fourth is a vowel (SCPI-99 volume 1, 6.2.1). Digits
/// and brackets are no mnemonic and stay as they are.
fn short_form(word: &str) -> &str {
    if word.len() <= 4 || !word.bytes().all(|byte| byte.is_ascii_alphabetic()) {
        return word;
    }
    let vowel = matches!(word.as_bytes()[3].to_ascii_uppercase(), b'A' | b'E' | b'I' | b'O' | b'U');
    &word[..if vowel { 3 } else { 4 }]
}

#[cfg(test)]
mod tests;
