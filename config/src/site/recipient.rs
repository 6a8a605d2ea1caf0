//! Who is told of alarms.

use hushwatch_quantity::Span;

use super::shelf::Names;
use crate::walk::{Table, Value};

/// Kinds that site files of this format may name.
const KINDS: [(&str, bool); 5] =
    [("command", true), ("webhook", false), ("email", false), ("syslog", false), ("mqtt", false)];

/// Somebody or something that is told of alarms.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Recipient {
    /// Its name.
    pub name: String,
    /// How it is told.
    pub kind: RecipientKind,
}

/// How a recipient is told.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum RecipientKind {
    /// A program is run with the notice on its standard input.
    Command {
        /// The program and its arguments; at least the program.
        run: Vec<String>,
        /// After this it is stopped, and counts as failed.
        timeout: Span,
    },
}

pub(super) fn read_all(root: &Table<'_>) -> Option<Vec<Recipient>> {
    let mut names = Names::default();
    let read = root.tables("recipient").into_iter().map(|value| {
        value.table(|table| {
            // Which keys there are depends on the kind.
            table.required("kind", "kind = \"command\"").and_then(read_kind)?;
            table.keys(&["name", "kind", "run", "timeout"]);
            let place = table.required("name", "name = \"shift\"");
            let name = place.and_then(|value| value.name());
            if let (Some(place), Some(name)) = (place, name) {
                names.add(place, name, "another recipient is named");
            }
            let run = table.required("run", "run = [\"/usr/local/bin/tell-the-shift\"]").and_then(read_run);
            let limits = Span::from_millis(100)..=Span::from_hours(1);
            let timeout = table.read_or("timeout", Span::from_secs(30), |value| value.duration(limits));
            let kind = RecipientKind::Command { run: run?, timeout: timeout? };
            Some(Recipient { name: name?.to_owned(), kind })
        })
    });
    read.collect::<Vec<_>>().into_iter().collect()
}

/// Refuses kinds that are none, and those that later versions will know.
fn read_kind(value: Value<'_>) -> Option<()> {
    if value.choice(&KINDS)? {
        return Some(());
    }
    value.refuse(
        format!("recipients of the kind `{}` are not available in this version", value.text().unwrap_or_default()),
        "take `kind = \"command\"` with a program that passes the notice on",
    )
}

fn read_run(value: Value<'_>) -> Option<Vec<String>> {
    let words = value.list()?;
    let run: Option<Vec<String>> =
        words.iter().map(|word| word.text().map(str::to_owned)).collect::<Vec<_>>().into_iter().collect();
    let run = run?;
    if run.first().is_none_or(String::is_empty) {
        return value
            .refuse("there is no program to run", "write it as in `run = [\"/usr/local/bin/tell-the-shift\"]`");
    }
    if run.iter().any(|word| word.contains('\0')) {
        return value.refuse("a word for a program cannot have a nought byte in it", "leave `\\u0000` out");
    }
    Some(run)
}
