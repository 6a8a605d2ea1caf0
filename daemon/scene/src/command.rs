//! Headers of SCPI-1999: long and short forms, nodes that may be left out, and parameters.

/// Does a header name this command? The pattern writes the short form in capitals and nodes that may be left out in
/// brackets, as the standard does: `[SENSe:]FREQuency:STARt`.
pub(crate) fn is(pattern: &str, header: &str) -> bool {
    let nodes: Vec<(&str, bool)> = pattern_nodes(pattern);
    let words: Vec<&str> = header.split(':').collect();
    fits(&nodes, &words)
}

/// The names of a pattern's nodes, and whether each may be left out.
fn pattern_nodes(pattern: &str) -> Vec<(&str, bool)> {
    let mut nodes = Vec::new();
    let mut inside = false;
    let mut start = 0;
    for (at, character) in pattern.char_indices() {
        if !matches!(character, '[' | ']' | ':') {
            continue;
        }
        if start < at {
            nodes.push((&pattern[start..at], inside));
        }
        start = at + 1;
        match character {
            '[' => inside = true,
            ']' => inside = false,
            _ => {}
        }
    }
    if start < pattern.len() {
        nodes.push((&pattern[start..], inside));
    }
    nodes
}

fn fits(nodes: &[(&str, bool)], words: &[&str]) -> bool {
    match (nodes.split_first(), words.split_first()) {
        (None, None) => true,
        (Some(((name, optional), rest)), words_first) => {
            let taken = words_first.is_some_and(|(word, others)| same(name, word) && fits(rest, others));
            taken || (*optional && fits(rest, words))
        }
        (None, Some(_)) => false,
    }
}

/// Is a word the short or the long form of a name, in capitals or not? A suffix of 1 may be written.
fn same(name: &str, word: &str) -> bool {
    let word = word.strip_suffix('1').unwrap_or(word);
    let short: String = name.chars().filter(|c| !c.is_ascii_lowercase()).collect();
    word.eq_ignore_ascii_case(name) || word.eq_ignore_ascii_case(&short)
}

/// Is a parameter this word, in its short or long form?
pub(crate) fn is_word(name: &str, word: &str) -> bool {
    let short: String = name.chars().filter(|c| !c.is_ascii_lowercase()).collect();
    word.eq_ignore_ascii_case(name) || word.eq_ignore_ascii_case(&short)
}

/// A number with the unit that may stand behind it, in the base unit.
pub(crate) fn number(text: &str) -> Option<f64> {
    const UNITS: [(&str, f64); 11] = [
        ("KHZ", 1e3),
        ("MHZ", 1e6),
        ("MAHZ", 1e6),
        ("GHZ", 1e9),
        ("HZ", 1.0),
        ("NS", 1e-9),
        ("US", 1e-6),
        ("MS", 1e-3),
        ("S", 1.0),
        ("DB", 1.0),
        ("", 1.0),
    ];
    let upper = text.trim().to_ascii_uppercase();
    UNITS.iter().find_map(|(unit, worth)| {
        let number = upper.strip_suffix(unit)?.trim_end();
        let number: f64 = number.parse().ok()?;
        number.is_finite().then_some(number * worth)
    })
}

/// The channel of a list as `(@3)`.
pub(crate) fn channel(text: &str) -> Option<u32> {
    text.trim().strip_prefix("(@")?.strip_suffix(')')?.trim().parse().ok()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn headers_in_all_their_forms() {
        let start = "[SENSe:]FREQuency:STARt";
        for header in ["FREQ:STAR", "freq:start", "SENSE:FREQUENCY:START", "sens:freq:star", "SENS1:FREQ1:STAR"] {
            assert!(is(start, header), "{header}");
        }
        for header in ["FREQ", "FREQ:STA", "FREQU:STAR", "SENS:FREQ", "FREQ:STAR:STAR", "", "STAR"] {
            assert!(!is(start, header), "{header}");
        }
        assert!(is("INITiate[:IMMediate]", "INIT") && is("INITiate[:IMMediate]", "INIT:IMM"));
        assert!(is("SYSTem:ERRor[:NEXT]", "SYST:ERR") && is("SYSTem:ERRor[:NEXT]", "syst:error:next"));
        assert!(is("[SENSe:]BANDwidth[:RESolution]", "BAND") && is("[SENSe:]BANDwidth[:RESolution]", "SENS:BAND:RES"));
        assert!(!is("[SENSe:]BANDwidth[:RESolution]", "BAND:VID"));
    }

    #[test]
    fn numbers_and_channels() {
        for (text, expected) in [("150e3", 150e3), ("150 kHz", 150e3), ("2MHZ", 2e6), ("20 ms", 0.02), ("-3", -3.0)] {
            assert_eq!(number(text), Some(expected), "{text}");
        }
        for text in ["", "NAN", "1e999", "kHz", "MAX"] {
            assert_eq!(number(text), None, "{text}");
        }
        assert_eq!((channel("(@2)"), channel("( @2)"), channel("2")), (Some(2), None, None));
    }
}
