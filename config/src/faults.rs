//! What is wrong with a file, and where: collected while the file is read, shown all at once.
//!
//! A [`Fault`] tells a place (a range of bytes), what is wrong there and what would be right. [`Faults`] keeps the
//! faults of one file, and of the files that it names, in the order of the text, and shows each with file, line,
//! column, the line itself and a caret. A fault of severity [`Severity::Warning`] does not refuse the file.

use std::borrow::Cow;
use std::fmt;
use std::ops::Range;
use std::path::{Path, PathBuf};
use std::sync::Arc;

use annotate_snippets::{AnnotationKind, Group, Level, Origin, Renderer, Snippet, normalize_untrusted_str};

/// A file as it was read.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Source {
    /// The path by which it was opened.
    pub path: PathBuf,
    /// Its whole text.
    pub text: String,
}

/// Does it refuse the file, or is it only told?
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Severity {
    /// The file is refused.
    Fault,
    /// The file is taken, but this is hardly what was meant.
    Warning,
}

/// One thing that is wrong, at its place in a file.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Fault {
    /// Refused, or only told.
    pub severity: Severity,
    /// What is wrong, in one line.
    pub what: String,
    /// The place, in bytes of the text; `None` stands for the file as a whole.
    pub span: Option<Range<usize>>,
    /// A few words beside the caret; may be empty.
    pub label: String,
    /// Other places of the same file that belong to it, each with a few words.
    pub related: Vec<(Range<usize>, String)>,
    /// What would be right, a line each.
    pub help: Vec<String>,
}

impl Fault {
    /// A fault at a place.
    pub fn new(span: Range<usize>, what: impl Into<String>) -> Self {
        Self { span: Some(span), ..Self::of_file(what) }
    }

    /// A fault of the file as a whole.
    pub fn of_file(what: impl Into<String>) -> Self {
        Self {
            severity: Severity::Fault,
            what: what.into(),
            span: None,
            label: String::new(),
            related: Vec::new(),
            help: Vec::new(),
        }
    }

    /// A warning at a place.
    pub fn warning(span: Range<usize>, what: impl Into<String>) -> Self {
        Self { severity: Severity::Warning, ..Self::new(span, what) }
    }

    /// With a few words beside the caret.
    #[must_use]
    pub fn with_label(mut self, label: impl Into<String>) -> Self {
        self.label = label.into();
        self
    }

    /// With another place of the same file, and what it has to do with it.
    #[must_use]
    pub fn with_related(mut self, span: Range<usize>, label: impl Into<String>) -> Self {
        self.related.push((span, label.into()));
        self
    }

    /// With what would be right; may be called several times.
    #[must_use]
    pub fn with_help(mut self, help: impl Into<String>) -> Self {
        self.help.push(help.into());
        self
    }
}

/// The faults and warnings of a file and of the files that it names.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Faults {
    source: Arc<Source>,
    list: Vec<(Arc<Source>, Fault)>,
}

impl Faults {
    /// Nothing wrong so far.
    pub fn new(source: Arc<Source>) -> Self {
        Self { source, list: Vec::new() }
    }

    /// A file that could not even be read: one fault without a place.
    pub fn unreadable(path: &Path, error: &std::io::Error) -> Self {
        let mut faults = Self::new(Arc::new(Source { path: path.to_owned(), text: String::new() }));
        faults.push(Fault::of_file(format!("cannot read this file: {error}")));
        faults
    }

    /// Adds a fault of this file.
    pub fn push(&mut self, fault: Fault) {
        let source = Arc::clone(&self.source);
        self.list.push((source, fault));
    }

    /// Adds all that is wrong with another file.
    pub fn absorb(&mut self, other: Self) {
        self.list.extend(other.list);
    }

    /// The path of the file that was read.
    pub fn path(&self) -> &Path {
        &self.source.path
    }

    /// The text of the file that was read; empty if it could not be.
    pub fn text(&self) -> &str {
        &self.source.text
    }

    /// All faults and warnings, each with the file in which it lies.
    pub fn iter(&self) -> impl Iterator<Item = (&Source, &Fault)> {
        self.list.iter().map(|(source, fault)| (source.as_ref(), fault))
    }

    /// How many there are, warnings included.
    pub fn len(&self) -> usize {
        self.list.len()
    }

    /// Is there nothing to tell?
    pub fn is_empty(&self) -> bool {
        self.list.is_empty()
    }

    /// Is there anything for which the file must be refused?
    pub fn refuses(&self) -> bool {
        self.list.iter().any(|(_, fault)| fault.severity == Severity::Fault)
    }

    /// Puts them in the order of the text; those of other files follow, file by file.
    #[must_use]
    pub fn sorted(mut self) -> Self {
        let own = Arc::clone(&self.source);
        self.list.sort_by(|(source_a, a), (source_b, b)| {
            let place = |source: &Arc<Source>, fault: &Fault| {
                fault.span.as_ref().map(|span| (source.path != own.path, span.start))
            };
            let file = |source: &Arc<Source>| (source.path != own.path).then(|| source.path.clone());
            (file(source_a), place(source_a, a), a.severity).cmp(&(file(source_b), place(source_b, b), b.severity))
        });
        self
    }

    /// As it is shown on a terminal, in colour or not: one report after the other, an empty line between them.
    pub fn render(&self, color: bool) -> String {
        let renderer = if color { Renderer::styled() } else { Renderer::plain() };
        let reports: Vec<String> = self.iter().map(|(source, fault)| render_one(&renderer, source, fault)).collect();
        reports.join("\n\n")
    }
}

/// As [`Faults::render`] without colour.
impl fmt::Display for Faults {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.render(false))
    }
}

impl std::error::Error for Faults {}

fn render_one(renderer: &Renderer, source: &Source, fault: &Fault) -> String {
    let path = source.path.to_string_lossy();
    let level = match fault.severity {
        Severity::Fault => Level::ERROR,
        Severity::Warning => Level::WARNING,
    };
    let mut group = level.primary_title(fault.what.as_str()).element_at(source, path, fault);
    for help in &fault.help {
        group = group.element(Level::HELP.message(normalize_untrusted_str(help)));
    }
    renderer.render(&[group])
}

/// The title's group with the lines of the file to which the fault points.
trait ElementAt<'a> {
    fn element_at(self, source: &'a Source, path: Cow<'a, str>, fault: &'a Fault) -> Group<'a>;
}

impl<'a> ElementAt<'a> for annotate_snippets::Title<'a> {
    fn element_at(self, source: &'a Source, path: Cow<'a, str>, fault: &'a Fault) -> Group<'a> {
        let Some(span) = &fault.span else { return self.element(Origin::path(path)) };
        let mut primary = AnnotationKind::Primary.span(within(&source.text, span));
        if !fault.label.is_empty() {
            primary = primary.label(fault.label.as_str());
        }
        let related = fault
            .related
            .iter()
            .map(|(span, label)| AnnotationKind::Context.span(within(&source.text, span)).label(label.as_str()));
        self.element(Snippet::source(source.text.as_str()).path(path).annotation(primary).annotations(related))
    }
}

/// The range cut to the text, moved outwards to whole characters, and at most up to the end of its first line: a
/// caret under a whole table hides more than it shows.
fn within(text: &str, span: &Range<usize>) -> Range<usize> {
    let start = text.floor_char_boundary(span.start);
    let end = text.ceil_char_boundary(span.end).max(start);
    let line = text[start..end].find(['\n', '\r']).unwrap_or(end - start);
    start..start + line
}
