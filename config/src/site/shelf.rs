//! Tables that have a name and are shared, or stand inline where they are used.

use std::cell::Cell;

use crate::faults::Fault;
use crate::walk::{Table, Value};

/// What can stand on a shelf.
pub(super) trait Shelved: Clone {
    /// The key of its tables, as in `[[probe]]`.
    const KEY: &'static str;
    /// Its keys, `name` among them.
    const KEYS: &'static [&'static str];
    /// What is needed to read it.
    type Context;

    /// Reads it from its table; the keys have been told already, the name has been read.
    fn read(table: &mut Table<'_>, name: &str, context: &Self::Context) -> Option<Self>;
}

/// All tables of a kind that have a name.
pub(super) struct Shelf<'a, T: Shelved> {
    entries: Vec<Entry<'a, T>>,
    context: T::Context,
}

struct Entry<'a, T> {
    name: &'a str,
    place: Value<'a>,
    /// `None` if something is wrong with it; its name is known all the same.
    content: Option<T>,
    used: Cell<bool>,
}

impl<'a, T: Shelved> Shelf<'a, T> {
    /// Reads all `[[KEY]]` of the root.
    pub(super) fn read(root: &Table<'a>, context: T::Context) -> Self {
        let mut names = Names::default();
        let entries = root.tables(T::KEY).into_iter().filter_map(|value| {
            value.table(|table| {
                table.keys(T::KEYS);
                let place = table.required("name", "name = \"...\"");
                let name = place.and_then(|value| value.name());
                let content = T::read(table, name.unwrap_or_default(), &context);
                let (place, name) = (place?, name?);
                let first = names.add(place, name, &format!("another {} is named", T::KEY));
                first.then(|| Entry { name, place, content, used: Cell::new(false) })
            })
        });
        let entries = entries.collect();
        Self { entries, context }
    }

    /// What a value stands for: the name of one on the shelf, or a table of its own, which is called `name` if it
    /// does not say otherwise.
    pub(super) fn find(&self, value: Value<'a>, name: &str) -> Option<T> {
        if value.is_table() {
            return value.table(|table| {
                table.keys(T::KEYS);
                let own_name = match table.optional("name") {
                    Some(value) => value.name()?,
                    None => name,
                };
                T::read(table, own_name, &self.context)
            });
        }
        let name = value.text()?;
        let Some(entry) = self.entries.iter().find(|entry| entry.name == name) else {
            let names = self.entries.iter().map(|entry| entry.name);
            return value.refuse_name(&format!("no {} is named", T::KEY), name, names);
        };
        entry.used.set(true);
        entry.content.clone()
    }

    /// All of them, as if each had been asked for.
    pub(super) fn all(&self) -> Vec<T> {
        self.entries.iter().inspect(|entry| entry.used.set(true)).filter_map(|entry| entry.content.clone()).collect()
    }

    /// Is there none?
    pub(super) fn is_empty(&self) -> bool {
        self.entries.is_empty()
    }

    /// Warns of those that nobody asked for; those with faults have been told of already.
    pub(super) fn warn_of_unused(&self) {
        for entry in self.entries.iter().filter(|entry| !entry.used.get() && entry.content.is_some()) {
            let what = format!("no cable uses the {} `{}`", T::KEY, entry.name);
            entry.place.warn(what, "name it at a cable, or leave it out");
        }
    }
}

/// Names that must not stand twice.
#[derive(Default)]
pub(super) struct Names<'a> {
    seen: Vec<(&'a str, Value<'a>)>,
}

impl<'a> Names<'a> {
    /// Remembers a name and answers whether it is new; if not, that is told, as in "another probe is named".
    pub(super) fn add(&mut self, place: Value<'a>, name: &'a str, what: &str) -> bool {
        if let Some((_, first)) = self.seen.iter().find(|(seen, _)| *seen == name) {
            let fault = Fault::new(place.span(), format!("{what} `{name}`"))
                .with_related(first.span(), "the first one")
                .with_help("each must have its own");
            place.collector().push(fault);
            return false;
        }
        self.seen.push((name, place));
        true
    }

    /// All names, each once.
    pub(super) fn all(&self) -> Vec<&'a str> {
        self.seen.iter().map(|(name, _)| *name).collect()
    }
}
