//! Where an answer begins and ends in the stream of bytes: a line, or a definite-length block of IEEE 488.2, 8.7.9.
//!
//! A [`Decoder`] is made for each question and fed with what comes. It knows what to expect and how much at most, so
//! that no instrument can fill the memory. A block may be followed by NL, CR NL or nothing: what ends it is passed over
//! when it comes with the block, and at the head of the next answer when it comes late.

use bytes::{Buf, BytesMut};
use thiserror::Error;

use crate::error::readable;

/// Bytes of line end that may stand before an answer.
const MOST_LINE_ENDS: usize = 16;

/// What is expected.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Expected {
    /// May it be a block? If so a `#` at its head makes it one.
    pub block: bool,
    /// What ends a line: NL, with a CR before it passed over, or CR.
    pub line_end: u8,
    /// The longest answer without its header and its end, bytes.
    pub longest: usize,
}

/// A whole answer, without header and line end.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Answer {
    /// A line.
    Line(Vec<u8>),
    /// The payload of a block.
    Block(Vec<u8>),
}

/// Why bytes are no answer.
#[derive(Clone, Debug, PartialEq, Eq, Error)]
pub enum FramingError {
    /// Longer than anything that was asked for.
    #[error("it is longer than {longest} bytes")]
    TooLong {
        /// The longest that was expected.
        longest: usize,
    },
    /// The header of a block is none.
    #[error("`{0}` is no header of a block of definite length")]
    Header(String),
    /// More bytes follow: an answer to something else.
    #[error("`{0}` follows it")]
    Trailing(String),
}

/// Finds one answer in the bytes that come.
#[derive(Debug)]
pub struct Decoder {
    expected: Expected,
    buffer: BytesMut,
    /// Bytes of the buffer in which no line end was found.
    searched: usize,
    line_ends: usize,
    block: Option<usize>,
}

impl Decoder {
    /// A decoder for one answer.
    pub fn new(expected: Expected) -> Self {
        Self { expected, buffer: BytesMut::new(), searched: 0, line_ends: 0, block: None }
    }

    /// Has nothing of the answer come yet?
    pub fn is_empty(&self) -> bool {
        self.buffer.is_empty() && self.block.is_none()
    }

    /// Takes what has come; answers the answer when it is whole.
    ///
    /// # Errors
    /// These bytes are no answer to the question. The decoder is then of no further use.
    pub fn push(&mut self, bytes: &[u8]) -> Result<Option<Answer>, FramingError> {
        self.buffer.extend_from_slice(bytes);
        if self.is_at_head() {
            self.pass_over_line_ends()?;
        }
        if self.block.is_none() && self.expected.block && self.buffer.first() == Some(&b'#') {
            self.read_header()?;
        }
        match self.block {
            Some(length) => self.end_block(length),
            // A header that is not yet whole is no line.
            None if self.expected.block && self.buffer.first() == Some(&b'#') => Ok(None),
            None => self.end_line(),
        }
    }

    fn is_at_head(&self) -> bool {
        self.block.is_none() && self.searched == 0
    }

    fn pass_over_line_ends(&mut self) -> Result<(), FramingError> {
        let ends = self.buffer.iter().take_while(|byte| matches!(byte, b'\r' | b'\n')).count();
        self.line_ends += ends;
        self.buffer.advance(ends);
        if self.line_ends > MOST_LINE_ENDS {
            return Err(FramingError::Trailing(readable(b"\n")));
        }
        Ok(())
    }

    /// Takes the header off the buffer once it is whole, and makes room for the payload.
    fn read_header(&mut self) -> Result<(), FramingError> {
        let Some(digits) = self.buffer.get(1) else { return Ok(()) };
        let wrong = |buffer: &[u8]| FramingError::Header(readable(&buffer[..buffer.len().min(12)]));
        // `#0` begins a block that ends with the message; a serial line has no end of message, and NL may be data.
        let digits = match digits {
            b'1'..=b'9' => usize::from(digits - b'0'),
            _ => return Err(wrong(&self.buffer)),
        };
        let so_far = &self.buffer[2..self.buffer.len().min(2 + digits)];
        if !so_far.iter().all(u8::is_ascii_digit) {
            return Err(wrong(&self.buffer));
        }
        if so_far.len() < digits {
            return Ok(());
        }
        // Nine digits fit.
        let length = so_far.iter().fold(0usize, |sum, digit| sum * 10 + usize::from(digit - b'0'));
        if length > self.expected.longest {
            return Err(FramingError::TooLong { longest: self.expected.longest });
        }
        self.buffer.advance(2 + digits);
        self.buffer.reserve(length.saturating_sub(self.buffer.len()) + 2);
        self.block = Some(length);
        Ok(())
    }

    fn end_block(&mut self, length: usize) -> Result<Option<Answer>, FramingError> {
        if self.buffer.len() < length {
            return Ok(None);
        }
        let payload = self.buffer.split_to(length);
        self.refuse_more()?;
        Ok(Some(Answer::Block(payload.to_vec())))
    }

    fn end_line(&mut self) -> Result<Option<Answer>, FramingError> {
        let end = self.buffer[self.searched..].iter().position(|byte| *byte == self.expected.line_end);
        let Some(end) = end.map(|end| self.searched + end) else {
            self.searched = self.buffer.len();
            // One more for the CR before NL.
            if self.searched > self.expected.longest + 1 {
                return Err(FramingError::TooLong { longest: self.expected.longest });
            }
            return Ok(None);
        };
        let line = self.buffer.split_to(end);
        let line = line.strip_suffix(b"\r").unwrap_or(&line);
        if line.len() > self.expected.longest {
            return Err(FramingError::TooLong { longest: self.expected.longest });
        }
        let line = line.to_vec();
        self.refuse_more()?;
        Ok(Some(Answer::Line(line)))
    }

    /// Only line ends may follow an answer.
    fn refuse_more(&self) -> Result<(), FramingError> {
        if self.buffer.iter().all(|byte| matches!(byte, b'\r' | b'\n')) {
            Ok(())
        } else {
            Err(FramingError::Trailing(readable(&self.buffer)))
        }
    }
}

#[cfg(test)]
mod tests;
