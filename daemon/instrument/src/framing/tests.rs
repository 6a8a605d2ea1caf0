use proptest::prelude::*;

use super::*;

const LINE: Expected = Expected { block: false, line_end: b'\n', longest: 20 };
const BLOCK: Expected = Expected { block: true, line_end: b'\n', longest: 20 };

fn whole(expected: Expected, bytes: &[u8]) -> Result<Option<Answer>, FramingError> {
    Decoder::new(expected).push(bytes)
}

fn line(text: &str) -> Answer {
    Answer::Line(text.as_bytes().to_vec())
}

#[test]
fn a_line_ends_with_nl_or_cr_nl() {
    assert_eq!(whole(LINE, b"1.5\n"), Ok(Some(line("1.5"))));
    assert_eq!(whole(LINE, b"1.5\r\n"), Ok(Some(line("1.5"))));
    assert_eq!(whole(Expected { line_end: b'\r', ..LINE }, b"1.5\r"), Ok(Some(line("1.5"))));
    assert_eq!(whole(LINE, b"1.5"), Ok(None));
}

#[test]
fn the_end_of_the_answer_before_is_passed_over() {
    let mut decoder = Decoder::new(LINE);
    assert_eq!(decoder.push(b"\r\n"), Ok(None));
    assert!(decoder.is_empty());
    assert_eq!(decoder.push(b"\n2"), Ok(None));
    assert!(!decoder.is_empty());
    assert_eq!(decoder.push(b"\n"), Ok(Some(line("2"))));
}

#[test]
fn line_ends_without_end_are_no_answer() {
    let mut decoder = Decoder::new(LINE);
    assert!((0..20).any(|_| decoder.push(b"\n").is_err()));
}

#[test]
fn a_block_may_hold_any_byte() {
    let payload = b"\n#3\r\n\x00\xff".to_vec();
    for end in ["", "\n", "\r\n"] {
        let bytes = [b"#18".as_slice(), &payload, b"x", end.as_bytes()].concat();
        let answer = whole(BLOCK, &bytes);
        assert_eq!(answer, Ok(Some(Answer::Block([payload.as_slice(), b"x"].concat()))));
    }
    assert_eq!(whole(BLOCK, b"#10"), Ok(Some(Answer::Block(Vec::new()))));
    assert_eq!(whole(BLOCK, b"#216only a part"), Ok(None));
    // Where none is expected a `#` is a character like others.
    assert_eq!(whole(LINE, b"#12\n"), Ok(Some(line("#12"))));
}

#[test]
fn headers_that_are_none_are_told() {
    for header in [b"#0abc\n".as_slice(), b"#a", b"#21x", b"# "] {
        assert!(matches!(whole(BLOCK, header), Err(FramingError::Header(_))), "{}", readable(header));
    }
}

#[test]
fn nothing_is_longer_than_what_was_asked_for() {
    let too_long = Err(FramingError::TooLong { longest: 20 });
    assert_eq!(whole(BLOCK, b"#9999999999"), too_long);
    assert_eq!(whole(BLOCK, b"#221"), too_long);
    assert_eq!(whole(LINE, b"123456789012345678901\n"), too_long);
    assert_eq!(whole(LINE, b"1234567890123456789012"), too_long);
    assert_eq!(whole(LINE, b"12345678901234567890\r\n"), Ok(Some(line("12345678901234567890"))));
}

#[test]
fn a_second_answer_behind_the_first_is_told() {
    assert_eq!(whole(LINE, b"1\n2"), Err(FramingError::Trailing("\\n2".to_owned())));
    assert!(matches!(whole(BLOCK, b"#11x1\n"), Err(FramingError::Trailing(_))));
}

proptest! {
    #[test]
    fn no_bytes_make_it_panic_or_grow(
        bytes in proptest::collection::vec(prop_oneof![any::<u8>(), proptest::sample::select(b"#0123\r\n".to_vec())], 0..300),
        cut in 1usize..40,
        block: bool,
        longest in 0usize..60,
    ) {
        let mut decoder = Decoder::new(Expected { block, line_end: b'\n', longest });
        for piece in bytes.chunks(cut) {
            match decoder.push(piece) {
                Ok(None) => prop_assert!(decoder.buffer.len() <= longest + 12, "{} bytes kept", decoder.buffer.len()),
                Ok(Some(Answer::Line(line))) => {
                    prop_assert!(line.len() <= longest && !line.contains(&b'\n'));
                    break;
                }
                Ok(Some(Answer::Block(payload))) => {
                    prop_assert!(block && payload.len() <= longest);
                    break;
                }
                Err(_) => break,
            }
        }
    }

    #[test]
    fn a_block_comes_back_whole_however_it_is_cut(
        payload in proptest::collection::vec(any::<u8>(), 0..300),
        cut in 1usize..40,
    ) {
        let length = payload.len().to_string();
        let bytes = [format!("\r\n#{}{length}", length.len()).as_bytes(), &payload].concat();
        let mut decoder = Decoder::new(Expected { block: true, line_end: b'\n', longest: 300 });
        let answers: Vec<_> = bytes.chunks(cut).filter_map(|piece| decoder.push(piece).expect("a block")).collect();
        prop_assert_eq!(answers, [Answer::Block(payload)]);
    }
}
