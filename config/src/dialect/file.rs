//! The dialect file: from a walked TOML tree to a [`Dialect`], with every fault at its place.

use std::collections::BTreeMap;
use std::sync::Arc;

use super::{
    ByteOrder, Coding, Compare, Dialect, Errors, Format, Identify, Line, LineEnd, Overload, Quantity, Setting, Sweep,
    Template, TemplateError,
};
use crate::faults::{Faults, Source};
use crate::walk::{Table, Value, document, suggestion};

/// More points than any receiver answers with at once: guards against a slip of the pen.
const MOST_POINTS: u32 = 1_000_000;

/// Quantities whose values are words, with the words of the site file.
const WORDS: [(Quantity, &[&str]); 3] = [
    (Quantity::Detector, &["rms", "average", "peak", "quasi-peak", "rms-average"]),
    (Quantity::BandwidthShape, &["gaussian-6dB", "gaussian-3dB", "critically-coupled-6dB"]),
    (Quantity::Unit, &["dBm", "dB(uV)"]),
];

/// The words that stand for the values of a quantity, if its values are words.
pub(super) fn words_of(quantity: Quantity) -> Option<&'static [&'static str]> {
    WORDS.iter().find(|(with_words, _)| *with_words == quantity).map(|(_, words)| *words)
}

pub(super) fn read(source: &Arc<Source>) -> Result<Dialect, Faults> {
    document(source, dialect).map(|read| read.value)
}

fn dialect(root: &mut Table<'_>) -> Option<Dialect> {
    root.keys(&[
        "format",
        "name",
        "description",
        "line",
        "identify",
        "errors",
        "prepare",
        "input",
        "setting",
        "values",
        "byte_order",
        "sweep",
        "clock",
        "overload",
    ]);
    let format = root.required("format", "format = 1").and_then(|value| value.integer(1..=1));
    let name = root.required("name", "name = \"my-receiver\"").and_then(|value| value.name());
    let description = optional(root, "description", |value| value.line());
    let line = optional(root, "line", |value| value.table(line));
    let identify =
        root.required("identify", "identify = { query = \"*IDN?\" }").and_then(|value| value.table(identify));
    let errors = optional(root, "errors", |value| value.table(errors));
    let prepare = optional(root, "prepare", |value| value.table(prepare));
    let select_input = optional(root, "input", |value| value.table(input));
    let settings = root.required("setting", "[setting.start_hz]").and_then(|value| settings(&value));
    let formats = formats(root);
    let byte_order = optional(root, "byte_order", |value| value.table(byte_order));
    let sweep = root.required("sweep", "sweep = { read = \"TRAC? TRACE1\", ... }").and_then(|value| value.table(sweep));
    let clock = optional(root, "clock", |value| value.table(clock));
    let overload = optional(root, "overload", |value| value.table(overload));
    format?;
    Some(Dialect {
        name: name?.to_owned(),
        description: description?.unwrap_or_default().to_owned(),
        line: line?.unwrap_or(Line { send: LineEnd::Lf, receive: LineEnd::Lf }),
        identify: identify?,
        errors: errors?,
        prepare: prepare?.unwrap_or_default(),
        select_input: select_input?,
        settings: settings?,
        formats: formats?,
        byte_order: byte_order?,
        sweep: sweep?,
        clock: clock?,
        overload: overload?,
    })
}

/// `Some(None)`: the key is not there, and need not be. `None`: it is, and wrong; that has been told.
#[expect(clippy::option_option, reason = "not there, and there but wrong, are two things")]
fn optional<'a, T>(
    table: &Table<'a>,
    key: &'static str,
    read: impl FnOnce(Value<'a>) -> Option<T>,
) -> Option<Option<T>> {
    match table.optional(key) {
        None => Some(None),
        Some(value) => read(value).map(Some),
    }
}

fn line(table: &mut Table<'_>) -> Option<Line> {
    table.keys(&["send", "receive"]);
    let words = LineEnd::ALL.map(|end| (end.label(), end));
    let send = optional(table, "send", |value| value.choice(&words));
    // CR NL needs no word of its own here: NL takes it as well.
    let receive = optional(table, "receive", |value| value.choice(&words[..2]));
    Some(Line { send: send?.unwrap_or(LineEnd::Lf), receive: receive?.unwrap_or(LineEnd::Lf) })
}

fn identify(table: &mut Table<'_>) -> Option<Identify> {
    table.keys(&["query", "fields"]);
    let query = table.required("query", "query = \"*IDN?\"").and_then(|value| command(&value));
    let fields = optional(table, "fields", |value| value.count(1..=32));
    Some(Identify { query: query?, fields: fields?.map(|fields| fields as usize) })
}

fn errors(table: &mut Table<'_>) -> Option<Errors> {
    table.keys(&["clear", "query", "none", "unknown_command", "try_later"]);
    let clear = optional(table, "clear", |value| command(&value));
    let query = table.required("query", "query = \"SYST:ERR?\"").and_then(|value| command(&value));
    let none = optional(table, "none", |value| number(&value));
    let unknown_command = optional(table, "unknown_command", |value| numbers(&value));
    let try_later = optional(table, "try_later", |value| numbers(&value));
    Some(Errors {
        clear: clear?,
        query: query?,
        none: none?.unwrap_or(0),
        unknown_command: unknown_command?.unwrap_or_default(),
        try_later: try_later?.unwrap_or_default(),
    })
}

fn prepare(table: &mut Table<'_>) -> Option<Vec<String>> {
    table.keys(&["commands"]);
    let list = table.required("commands", "commands = [\"INIT:CONT OFF\"]")?.list()?;
    all(list.iter().map(command))
}

fn input(table: &mut Table<'_>) -> Option<Template> {
    table.keys(&["select"]);
    let value = table.required("select", "select = \"ROUT:CLOS (@{input})\"")?;
    let select = template(&value)?;
    if !select.quantities().any(|quantity| quantity == Quantity::Input) {
        return value.refuse("this selects no input", "the number of the input is filled in for `{input}`");
    }
    Some(select)
}

/// The settings, in the order of the text: a TOML table has none of its own.
fn settings(value: &Value<'_>) -> Option<Vec<Setting>> {
    value.table(|table| {
        table.keys(&Quantity::LABELS);
        let mut found: Vec<_> = Quantity::ALL
            .into_iter()
            .filter_map(|quantity| table.optional(quantity.label()).map(|value| (quantity, value)))
            .collect();
        found.sort_by_key(|(_, value)| value.span().start);
        let settings = all(found.into_iter().map(|(quantity, value)| value.table(|table| setting(quantity, table))))?;
        let tells_range = |settings: &[Setting]| {
            let set = |wanted| settings.iter().flat_map(|setting| setting.set.quantities()).any(|q| q == wanted);
            (set(Quantity::StartHz) && set(Quantity::StopHz)) || (set(Quantity::CenterHz) && set(Quantity::SpanHz))
        };
        if !tells_range(&settings) {
            return value.refuse(
                "no setting tells the instrument where to sweep",
                "there must be `[setting.start_hz]` and `[setting.stop_hz]`, or `center_hz` and `span_hz`",
            );
        }
        Some(settings)
    })
}

fn setting(quantity: Quantity, table: &mut Table<'_>) -> Option<Setting> {
    table.keys(&["set", "get", "compare", "tolerance", "words", "may_be_unknown"]);
    let set = table.required("set", "set = \"BAND {rbw_hz}\"").and_then(|value| setting_command(quantity, &value));
    let get = optional(table, "get", |value| command(&value));
    let tolerance = optional(table, "tolerance", |value| value.number(0.0..=0.5));
    let compare = optional(table, "compare", |value| {
        value.choice(&[("equal", "equal"), ("at-least", "at-least"), ("text", "text")])
    });
    let words = optional(table, "words", |value| words(quantity, &value));
    let may_be_unknown = optional(table, "may_be_unknown", |value| value.boolean());
    let tolerance = tolerance?;
    let compare = match compare?.unwrap_or(if words_of(quantity).is_some() { "text" } else { "equal" }) {
        "text" if tolerance.is_some() => {
            let value = table.optional("tolerance")?;
            return value.refuse("words have no tolerance", "leave this line out, or compare as \"equal\"");
        }
        "text" => Compare::Text,
        "at-least" => Compare::AtLeast { tolerance: tolerance.unwrap_or(0.0) },
        _ => Compare::Equal { tolerance: tolerance.unwrap_or(0.0) },
    };
    if compare != Compare::Text && words_of(quantity).is_some() {
        let value = table.optional("compare")?;
        return value.refuse(format!("`{quantity}` is a word, not a number"), "write `compare = \"text\"`");
    }
    Some(Setting {
        quantity,
        set: set?,
        get: get?,
        compare,
        words: words?.unwrap_or_default(),
        may_be_unknown: may_be_unknown?.unwrap_or(false),
    })
}

/// A command that sets a quantity must have a gap for it: a fixed text would set something else than was asked for.
fn setting_command(quantity: Quantity, value: &Value<'_>) -> Option<Template> {
    let set = template(value)?;
    if set.quantities().any(|filled| filled == quantity) {
        return Some(set);
    }
    value.refuse(
        format!("this command does not say the {quantity} that it should set"),
        format!("write `{{{quantity}}}` where the value belongs"),
    )
}

fn words(quantity: Quantity, value: &Value<'_>) -> Option<BTreeMap<String, String>> {
    let Some(known) = words_of(quantity) else {
        return value.refuse(format!("`{quantity}` is a number and has no words"), "leave this line out");
    };
    value.table(|table| {
        table.keys(known);
        let pairs = known.iter().filter_map(|word| table.optional(word).map(|value| (*word, value)));
        let pairs = all(pairs.map(|(word, value)| Some((word.to_owned(), command(&value)?))))?;
        Some(pairs.into_iter().collect())
    })
}

fn formats(root: &Table<'_>) -> Option<Vec<Format>> {
    let tables = root.tables("values");
    if tables.is_empty() {
        root.required("values", "[[values]] and below it coding = \"ascii\"")?;
    }
    all(tables.iter().map(|value| value.table(format)))
}

fn format(table: &mut Table<'_>) -> Option<Format> {
    table.keys(&["coding", "set", "get", "expect"]);
    let codings = Coding::ALL.map(|coding| (coding.label(), coding));
    let coding = table.required("coding", "coding = \"ascii\"").and_then(|value| value.choice(&codings));
    let set = optional(table, "set", |value| command(&value));
    let get = optional(table, "get", |value| command(&value));
    let expect = if table.has("get") {
        table.required("expect", "expect = \"REAL,32\"").and_then(|value| command(&value))
    } else {
        optional(table, "expect", |value| command(&value)).map(Option::unwrap_or_default)
    };
    Some(Format { set: set?, get: get?, expect: expect?, coding: coding? })
}

fn byte_order(table: &mut Table<'_>) -> Option<ByteOrder> {
    table.keys(&["set", "get", "big", "little"]);
    let set = table.required("set", "set = \"FORM:BORD NORM\"").and_then(|value| command(&value));
    let get = table.required("get", "get = \"FORM:BORD?\"").and_then(|value| command(&value));
    let big = table.required("big", "big = \"NORM\"").and_then(|value| command(&value));
    let little = table.required("little", "little = \"SWAP\"").and_then(|value| command(&value));
    Some(ByteOrder { set: set?, get: get?, big: big?, little: little? })
}

fn sweep(table: &mut Table<'_>) -> Option<Sweep> {
    table.keys(&["trigger", "wait", "read", "max_points"]);
    let trigger = optional(table, "trigger", |value| all(value.list()?.iter().map(template)));
    let wait = optional(table, "wait", |value| value.table(wait));
    let read = table.required("read", "read = \"TRAC? TRACE1\"").and_then(|value| template(&value));
    let points = table.required("max_points", "max_points = 1001").and_then(|value| value.count(2..=MOST_POINTS));
    Some(Sweep { trigger: trigger?.unwrap_or_default(), wait: wait?, read: read?, max_points: points? })
}

fn wait(table: &mut Table<'_>) -> Option<(String, String)> {
    table.keys(&["query", "answer"]);
    let query = table.required("query", "query = \"*OPC?\"").and_then(|value| command(&value));
    let answer = table.required("answer", "answer = \"1\"").and_then(|value| command(&value));
    Some((query?, answer?))
}

fn clock(table: &mut Table<'_>) -> Option<String> {
    table.keys(&["query"]);
    command(&table.required("query", "query = \"SYST:CLOC?\"")?)
}

fn overload(table: &mut Table<'_>) -> Option<Overload> {
    table.keys(&["query", "mask"]);
    let query = table.required("query", "query = \"STAT:QUES:COND?\"").and_then(|value| command(&value));
    let mask = table.required("mask", "mask = 8").and_then(|value| value.count(1..=u32::MAX));
    Some(Overload { query: query?, mask: mask? })
}

/// A command in which nothing is filled in: it is sent as it stands.
fn command(value: &Value<'_>) -> Option<String> {
    let filled = template(value)?;
    match filled.quantities().next() {
        None => filled.fill(|_| None).ok(),
        Some(quantity) => {
            value.refuse(format!("`{{{quantity}}}` cannot be filled in here"), "write this text without placeholders")
        }
    }
}

fn template(value: &Value<'_>) -> Option<Template> {
    let error = match Template::parse(value.text()?) {
        Ok(template) => return Some(template),
        Err(error) => error,
    };
    let help = match &error {
        TemplateError::Unknown { name, .. } => {
            let near = suggestion(name, Quantity::LABELS);
            format!("{near}; known are: {}", Quantity::LABELS.join(", "))
        }
        TemplateError::Brace { .. } => "a placeholder is written as in `{start_hz}`, a brace itself as `{{`".to_owned(),
        TemplateError::Control { .. } => "line ends are set in `[line]`; write the command alone".to_owned(),
        TemplateError::Empty => "write the command, or leave the line out".to_owned(),
    };
    value.refuse(error.to_string(), help)
}

fn number(value: &Value<'_>) -> Option<i64> {
    value.integer(-99_999..=99_999)
}

fn numbers(value: &Value<'_>) -> Option<Vec<i64>> {
    all(value.list()?.iter().map(number))
}

/// All of them, or none; each one is looked at, so that each fault is told.
fn all<T>(values: impl Iterator<Item = Option<T>>) -> Option<Vec<T>> {
    let mut complete = true;
    let found = values.filter_map(|value| {
        complete &= value.is_some();
        value
    });
    let found = found.collect();
    complete.then_some(found)
}
