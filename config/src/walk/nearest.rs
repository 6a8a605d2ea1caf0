//! The known name that somebody most probably meant.

/// The candidate nearest to `name`, if one is near enough to be a slip of the pen: a third of its letters, and one
/// in a short name; or one that goes on where the other ends. Upper and lower case count as the same.
pub fn nearest<'a>(name: &str, candidates: impl IntoIterator<Item = &'a str, IntoIter: Clone>) -> Option<&'a str> {
    let wanted: Vec<char> = name.to_lowercase().chars().collect();
    // Names from a file may be of any length, and the distance takes the product of both.
    if wanted.len() > 100 {
        return None;
    }
    let mut candidates = candidates.into_iter();
    candidates
        .clone()
        .map(|candidate| {
            let letters: Vec<char> = candidate.to_lowercase().chars().collect();
            (distance(&wanted, &letters), letters.len(), candidate)
        })
        .filter(|(distance, length, _)| *distance <= (length.max(&wanted.len()) / 3).max(1) && distance < length)
        .min_by_key(|(distance, _, _)| *distance)
        .map(|(_, _, candidate)| candidate)
        .or_else(|| candidates.find(|candidate| goes_on(&name.to_lowercase(), &candidate.to_lowercase())))
}

/// Does one begin with the other, as `baudrate` and `baud`?
fn goes_on(a: &str, b: &str) -> bool {
    a.len().min(b.len()) >= 3 && (a.starts_with(b) || b.starts_with(a))
}

/// A line of help for a name that is not known: the nearest one, or all of them.
pub fn suggestion<'a>(name: &str, known: impl IntoIterator<Item = &'a str>) -> String {
    const SHOWN: usize = 16;
    let known: Vec<&str> = known.into_iter().collect();
    if let Some(near) = nearest(name, known.iter().copied()) {
        return format!("did you mean `{near}`?");
    }
    let shown: Vec<String> = known.iter().take(SHOWN).map(|name| format!("`{name}`")).collect();
    match known.len() {
        0 => String::from("there is none to choose from"),
        1 => format!("there is only {}", shown.concat()),
        all if all > SHOWN => format!("there are {} and {} more", shown.join(", "), all - SHOWN),
        _ => format!("there are {}", shown.join(", ")),
    }
}

/// How many letters must be put in, taken out, replaced or swapped with their neighbour to make one of the other
/// (the restricted Damerau-Levenshtein distance, also called optimal string alignment).
fn distance(a: &[char], b: &[char]) -> usize {
    let mut before_last = vec![0; b.len() + 1];
    let mut last: Vec<usize> = (0..=b.len()).collect();
    for i in 1..=a.len() {
        let mut row = vec![i; b.len() + 1];
        for j in 1..=b.len() {
            let replaced = last[j - 1] + usize::from(a[i - 1] != b[j - 1]);
            row[j] = replaced.min(last[j] + 1).min(row[j - 1] + 1);
            if i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1] {
                row[j] = row[j].min(before_last[j - 2] + 1);
            }
        }
        before_last = std::mem::replace(&mut last, row);
    }
    last[b.len()]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn distances() {
        for (a, b, wanted) in [
            ("", "", 0),
            ("", "abc", 3),
            ("kitten", "sitting", 3),
            ("probe", "porbe", 1),
            ("a", "b", 1),
            ("ca", "abc", 3),
        ] {
            let letters = |text: &str| text.chars().collect::<Vec<_>>();
            assert_eq!(distance(&letters(a), &letters(b)), wanted, "{a} {b}");
            assert_eq!(distance(&letters(b), &letters(a)), wanted, "{b} {a}");
        }
    }

    #[test]
    fn only_a_slip_is_corrected() {
        let known = ["probe", "port", "baud", "every"];
        assert_eq!(nearest("prob", known), Some("probe"));
        assert_eq!(nearest("BAUD", known), Some("baud"));
        assert_eq!(nearest("evry", known), Some("every"));
        assert_eq!(nearest("baudrate", known), Some("baud"));
        assert_eq!(nearest("colour", known), None);
        assert_eq!(nearest("", known), None);
        assert_eq!(nearest(&"x".repeat(100_000), known), None);
    }

    #[test]
    fn help_for_what_is_not_known() {
        assert_eq!(suggestion("W21", ["W12", "W03"]), "did you mean `W12`?");
        assert_eq!(suggestion("motor", ["W12", "W03"]), "there are `W12`, `W03`");
        assert_eq!(suggestion("motor", ["W12"]), "there is only `W12`");
        assert_eq!(suggestion("motor", []), "there is none to choose from");
    }
}
