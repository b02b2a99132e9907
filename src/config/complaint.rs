//! What is wrong with a config file: one complaint a mistake, each with its place, and all of a file together.

use std::cell::RefCell;
use std::fmt;
use std::path::{Path, PathBuf};

/// A place in a config file, both counted from 1; the column in characters.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub struct Place {
    /// Line.
    pub line: usize,
    /// Column.
    pub column: usize,
}

/// One mistake, or one unlikely value: where it is, what stands there, and what would be right.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Complaint {
    /// The config file.
    pub file: PathBuf,
    /// Where in it; `None` when it is about the file as a whole.
    pub place: Option<Place>,
    /// What stands there, as it was written; empty when there is nothing to show. Never a secret.
    pub found: String,
    /// What was expected, with an example, or why the value is unlikely.
    pub says: String,
}

impl fmt::Display for Complaint {
    /// `railtide.toml:12: gain = "1.0": expected a number such as 1.0`
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}:", self.file.display())?;
        if let Some(place) = self.place {
            write!(f, "{}:", place.line)?;
        }
        if !self.found.is_empty() {
            write!(f, " {}:", self.found)?;
        }
        write!(f, " {}", self.says)
    }
}

/// Every complaint about one file, in the order of its lines; never empty.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub struct Complaints(Vec<Complaint>);

impl Complaints {
    /// Each complaint, in the order of the lines.
    pub fn iter(&self) -> impl Iterator<Item = &Complaint> {
        self.0.iter()
    }
}

impl fmt::Display for Complaints {
    /// One complaint a line.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (i, complaint) in self.0.iter().enumerate() {
            if i > 0 {
                writeln!(f)?;
            }
            write!(f, "{complaint}")?;
        }
        Ok(())
    }
}

/// A stretch of the file, in bytes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Span {
    pub(super) start: usize,
    pub(super) end: usize,
}

impl From<std::ops::Range<usize>> for Span {
    fn from(range: std::ops::Range<usize>) -> Self {
        Span { start: range.start, end: range.end }
    }
}

/// A value and where it was written.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct At<T> {
    pub(super) value: T,
    pub(super) span: Span,
}

/// Collects what is found wrong while a file is read, so that reading goes on to the next mistake.
#[derive(Debug)]
pub(super) struct Notes<'a> {
    file: &'a Path,
    text: &'a str,
    line_starts: Vec<usize>,
    complaints: RefCell<Vec<Complaint>>,
    warnings: RefCell<Vec<Complaint>>,
}

impl<'a> Notes<'a> {
    pub(super) fn new(file: &'a Path, text: &'a str) -> Self {
        let line_starts = std::iter::once(0).chain(text.match_indices('\n').map(|(i, _)| i + 1)).collect();
        Notes { file, text, line_starts, complaints: RefCell::default(), warnings: RefCell::default() }
    }

    /// The file's text.
    pub(super) fn text(&self) -> &'a str {
        self.text
    }

    /// Notes a mistake at `span`, quoting what is written there.
    pub(super) fn complain(&self, span: Span, says: impl Into<String>) {
        self.complain_of(span, self.quote(span), says);
    }

    /// Notes a mistake at `span` under a heading of the caller's own.
    pub(super) fn complain_of(&self, span: Span, found: impl Into<String>, says: impl Into<String>) {
        let complaint = self.complaint(span, found.into(), says.into());
        self.complaints.borrow_mut().push(complaint);
    }

    /// Notes a value that is possible but unlikely, and why.
    pub(super) fn warn(&self, span: Span, why: impl Into<String>) {
        self.warn_of(span, self.quote(span), why);
    }

    /// The same under a heading of the caller's own.
    pub(super) fn warn_of(&self, span: Span, found: impl Into<String>, why: impl Into<String>) {
        let warning = self.complaint(span, found.into(), why.into());
        self.warnings.borrow_mut().push(warning);
    }

    /// What is written at `span`, shortened to one line of bearable length.
    pub(super) fn quote(&self, span: Span) -> String {
        let written = self.text.get(span.start..span.end).unwrap_or_default();
        let line = written.lines().next().unwrap_or_default();
        let short: String = line.chars().take(QUOTE_CHARS).collect();
        if short.len() < written.len() { format!("{}…", short.trim_end()) } else { short }
    }

    /// The line that `span` starts on, for a complaint that refers to another place.
    pub(super) fn line(&self, span: Span) -> usize {
        self.place(span).line
    }

    /// The warnings, or the complaints if there are any; both in the order of their lines.
    pub(super) fn finish(self) -> Result<Vec<Complaint>, Complaints> {
        let in_order = |mut list: Vec<Complaint>| {
            list.sort_by_key(|c| c.place);
            list
        };
        let complaints = self.complaints.into_inner();
        if complaints.is_empty() {
            Ok(in_order(self.warnings.into_inner()))
        } else {
            Err(Complaints(in_order(complaints)))
        }
    }

    fn complaint(&self, span: Span, found: String, says: String) -> Complaint {
        Complaint { file: self.file.to_owned(), place: Some(self.place(span)), found, says }
    }

    fn place(&self, span: Span) -> Place {
        let line = self.line_starts.partition_point(|start| *start <= span.start);
        let line_start = self.line_starts[line - 1];
        let before = self.text.get(line_start..span.start).unwrap_or_default();
        Place { line, column: before.chars().count() + 1 }
    }
}

/// How much of a mistaken value is quoted, in characters.
const QUOTE_CHARS: usize = 60;
