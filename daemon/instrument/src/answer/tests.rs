use proptest::prelude::*;

use super::*;

#[test]
fn numbers_of_ieee_488_2_in_all_their_forms() {
    let numbers = [
        ("1", 1.0),
        ("+15", 15.0),
        ("-73.5", -73.5),
        (".5", 0.5),
        ("5.", 5.0),
        ("-1.25E+2", -125.0),
        ("1e3", 1000.0),
        (" \t7 ", 7.0),
    ];
    for (text, value) in numbers {
        assert_eq!(number(text.as_bytes()), Some(value), "{text}");
    }
    for text in ["", "inf", "NaN", "1,2", "0x10", "1 2", "--1", "e5", "\u{661}"] {
        assert_eq!(number(text.as_bytes()), None, "{text}");
    }
}

#[test]
fn lists_must_have_their_number_of_values() {
    assert_eq!(levels_from_text(b"-1, -2.5E0,3", 3), Ok(vec![-1.0, -2.5, 3.0]));
    assert_eq!(levels_from_text(b"-1,-2", 3), Err(AnswerError::WrongCount { got: 2, expected: 3 }));
    assert_eq!(levels_from_text(b"", 3), Err(AnswerError::WrongCount { got: 0, expected: 3 }));
    let not_a_number = AnswerError::NotANumber { index: 1, text: "x".to_owned() };
    assert_eq!(levels_from_text(b"-1,x,-2", 3), Err(not_a_number));
    assert_eq!(levels_from_text(b"1E5", 1), Err(AnswerError::NoLevel { index: 0, value: 1e5 }));
}

#[test]
fn the_reserved_numbers_of_scpi_were_not_measured() {
    // SCPI-99 volume 1, 7.2.1.4 and 7.2.1.5.
    let text = b"9.91E37,9.9E37,-9.9E+37,+9.91000E+37,-80";
    let levels = levels_from_text(text, 5).expect("levels");
    assert!(levels[..4].iter().all(|level| level.is_nan()));
    assert_eq!(levels[4], -80.0);
    let binary = [9.91e37f32, 9.9e37, -9.9e37, f32::NAN, f32::INFINITY].map(f32::to_be_bytes).concat();
    assert!(levels_from_real32(&binary, Order::Big, 5).expect("levels").iter().all(|level| level.is_nan()));
}

#[test]
fn binary_values_in_the_wrong_order_are_noticed() {
    let little = [-73.5f32, -80.25].map(f32::to_le_bytes).concat();
    assert_eq!(levels_from_real32(&little, Order::Little, 2), Ok(vec![-73.5, -80.25]));
    assert!(matches!(levels_from_real32(&little, Order::Big, 2), Err(AnswerError::NoLevel { index: 0, .. })));
    assert_eq!(levels_from_real32(&little[..7], Order::Big, 2), Err(AnswerError::PartOfAValue { bytes: 7, size: 4 }));
    assert_eq!(levels_from_real32(&little, Order::Little, 1), Err(AnswerError::WrongCount { got: 2, expected: 1 }));
}

#[test]
fn entries_of_the_error_queue_are_told_from_other_answers() {
    let entry = |number, text: &str| Ok(DeviceError { number, text: text.to_owned() });
    assert_eq!(device_error(b"0,\"No error\""), entry(0, "No error"));
    assert_eq!(device_error(b"-113, \"Undefined header;\"\"X\"\"\""), entry(-113, "Undefined header;\"X\""));
    assert_eq!(device_error(b"+0,No error"), entry(0, "No error"));
    for other in [b"0".as_slice(), b"1", b"-1,-2,-3", b"1,2E3", b"Bench,RX-0,1,1.0", b"\xff,\"x\"", b""] {
        assert!(device_error(other).is_err(), "{}", readable(other));
    }
}

#[test]
fn identities_are_told_from_other_answers() {
    assert_eq!(identity(b" Bench,RX-0,1,1.0\r", Some(4)), Ok("Bench,RX-0,1,1.0".to_owned()));
    assert!(identity(b"Bench,RX-0,1", Some(4)).is_err());
    assert!(identity(b"Bench,RX-0,1", None).is_ok());
    for other in [b"-1,-2,-3,-4".as_slice(), b"-113,\"Undefined header\"", b"1", b"", b"a\x07b,c,d,e", b"\xff,a,b,c"] {
        assert!(identity(other, None).is_err(), "{}", readable(other));
    }
}

#[test]
fn words_come_in_their_long_or_short_form() {
    let same = [
        ("RMS", "rms"),
        ("AVER", "AVERage"),
        ("POS", "\"POSITIVE\""),
        ("DBUV", "DBUV"),
        ("REAL,32", "REAL,32"),
        ("ASC", "ASCii,0"),
        ("NORM", "NORMAL"),
        ("1", "+1"),
    ];
    for (asked, got) in same {
        assert!(same_words(asked, got), "{asked} {got}");
    }
    for (asked, got) in [("DBM", "DBUV"), ("REAL,32", "REAL,64"), ("REAL,32", "REAL"), ("RMS", ""), ("POS", "POWer")] {
        assert!(!same_words(asked, got), "{asked} {got}");
    }
}

proptest! {
    #[test]
    fn no_bytes_make_a_panic_or_another_number_of_levels(
        bytes in proptest::collection::vec(prop_oneof![any::<u8>(), proptest::sample::select(b"0123456789.,-+eE \"".to_vec())], 0..120),
        expected in 0usize..40,
    ) {
        if let Ok(levels) = levels_from_text(&bytes, expected) {
            prop_assert_eq!(levels.len(), expected);
        }
        for order in [Order::Big, Order::Little] {
            if let Ok(levels) = levels_from_real32(&bytes, order, expected) {
                prop_assert_eq!(levels.len(), expected);
                prop_assert!(levels.iter().all(|level| level.is_nan() || level.abs() <= GREATEST_LEVEL));
            }
        }
        let _ = device_error(&bytes);
        // An answer is one or the other, never both.
        prop_assert!(identity(&bytes, None).is_err() || device_error(&bytes).is_err());
        if let Some(number) = number(&bytes) {
            prop_assert!(!number.is_nan());
        }
    }

    #[test]
    fn levels_come_back_as_they_were_sent(values in proptest::collection::vec(-200.0f32..200.0, 1..100)) {
        let expected: Vec<f64> = values.iter().map(|value| f64::from(*value)).collect();
        let small = |value: &f64| *value != 0.0 && value.abs() < SMALLEST_LEVEL;
        prop_assume!(!expected.iter().any(small));
        let text = values.iter().map(|value| format!("{:E}", f64::from(*value))).collect::<Vec<_>>().join(",");
        prop_assert_eq!(levels_from_text(text.as_bytes(), values.len()), Ok(expected.clone()));
        let binary: Vec<u8> = values.iter().flat_map(|value| value.to_be_bytes()).collect();
        prop_assert_eq!(levels_from_real32(&binary, Order::Big, values.len()), Ok(expected));
    }
}
