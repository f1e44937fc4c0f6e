//! What is wrong with a spec and where: span → path:line:column, source line, caret, hint.

use annotate_snippets::{AnnotationKind, Level, Renderer, Snippet};
use std::fmt;
use std::ops::Range;
use std::path::{Path, PathBuf};

/// Most problems that are written out; the rest are counted.
const SHOWN: usize = 50;
/// Most problems that are kept: finding the line of each costs a pass over the text.
const KEPT: usize = 500;
/// Longest stretch of a source line that is kept, bytes on either side of the place.
const KEPT_BYTES: usize = 160;

/// One problem of a spec, or of a file that it names.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Diagnostic {
    /// The file as the user named it.
    pub file: PathBuf,
    /// Line, counted from one; none if the problem is the file as a whole.
    pub line: Option<usize>,
    /// Column in characters, counted from one; none if the problem is the file as a whole.
    pub column: Option<usize>,
    /// Byte range in the file; none if the problem is the file as a whole.
    pub span: Option<Range<usize>>,
    /// What is wrong.
    pub message: String,
    /// What was expected instead.
    pub expected: Option<String>,
    /// How to mend it.
    pub hint: Option<String>,
    /// The line of the file (or a stretch of it, if it is long), and the byte range within that to underline.
    excerpt: Option<(String, Range<usize>)>,
}

impl Diagnostic {
    /// A problem of a file as a whole.
    pub(super) fn of_file(file: &Path, message: impl Into<String>) -> Self {
        Self {
            file: file.to_path_buf(),
            line: None,
            column: None,
            span: None,
            message: message.into(),
            expected: None,
            hint: None,
            excerpt: None,
        }
    }

    /// A problem at a byte range of a text; the range may end past the text.
    pub(super) fn at(
        file: &Path,
        text: &str,
        span: &Range<usize>,
        message: impl Into<String>,
    ) -> Self {
        let start = boundary_before(text, span.start);
        let line_start = text[..start].rfind('\n').map_or(0, |i| i + 1);
        let line_end = text[start..].find('\n').map_or(text.len(), |i| start + i);
        let line_end = line_start + text[line_start..line_end].trim_end_matches('\r').len();
        // A long line is cut around the place, so that garbage is not printed by the megabyte.
        let from = boundary_before(text, line_start.max(start.saturating_sub(KEPT_BYTES)));
        let to = boundary_before(text, line_end.min(start + KEPT_BYTES)).max(start);
        let underline_from = start.min(to);
        let underline_to = boundary_before(text, span.end.clamp(underline_from, to));
        Self {
            line: Some(text[..start].matches('\n').count() + 1),
            column: Some(text[line_start..start].chars().count() + 1),
            span: Some(start..span.end.clamp(start, text.len())),
            excerpt: Some((
                text[from..to].to_owned(),
                underline_from - from..underline_to - from,
            )),
            ..Self::of_file(file, message)
        }
    }

    /// Says what was expected.
    pub(super) fn expected(&mut self, expected: impl Into<String>) -> &mut Self {
        self.expected = Some(expected.into());
        self
    }

    /// Says how to mend it.
    pub(super) fn hint(&mut self, hint: impl Into<String>) -> &mut Self {
        self.hint = Some(hint.into());
        self
    }

    /// The whole message: `path:line:column: what is wrong`, the line of the source with a caret and what was
    /// expected, and how to mend it. `colour` adds terminal colours.
    #[must_use]
    pub fn render(&self, colour: bool) -> String {
        if self.excerpt.is_none() {
            let notes = [&self.expected, &self.hint].into_iter().flatten();
            return notes.fold(
                format!("{}: {}", self.file.display(), self.message),
                |text, note| format!("{text}\n  = {note}"),
            );
        }
        let mut title = self.file.display().to_string();
        if let (Some(line), Some(column)) = (self.line, self.column) {
            title += &format!(":{line}:{column}");
        }
        title += ": ";
        title += &self.message;
        let renderer = if colour {
            Renderer::styled()
        } else {
            Renderer::plain()
        };
        let mut group = Level::ERROR
            .no_name()
            .primary_title(title.as_str())
            .elements(std::iter::empty::<annotate_snippets::Message<'_>>());
        if let (Some((source, underline)), Some(line)) = (&self.excerpt, self.line) {
            let annotation = AnnotationKind::Primary
                .span(underline.clone())
                .label(self.expected.as_deref());
            group = group.element(
                Snippet::source(source.as_str())
                    .line_start(line)
                    .annotation(annotation),
            );
        }
        let notes: Vec<String> = self
            .hint
            .iter()
            .map(|hint| annotate_snippets::normalize_untrusted_str(hint))
            .collect();
        for note in &notes {
            group = group.element(Level::HELP.no_name().message(note.as_str()));
        }
        let rendered = renderer.render(&[group]);
        // The renderer pads some lines with blanks.
        let lines: Vec<&str> = rendered.lines().map(str::trim_end).collect();
        lines.join("\n")
    }
}

impl fmt::Display for Diagnostic {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.render(false))
    }
}

/// Everything that is wrong with a spec, in the order of the file; never empty.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SpecErrors(pub Vec<Diagnostic>);

impl SpecErrors {
    /// All messages, one after another; `colour` adds terminal colours.
    #[must_use]
    pub fn render(&self, colour: bool) -> String {
        let mut parts: Vec<String> = self
            .0
            .iter()
            .take(SHOWN)
            .map(|d| d.render(colour))
            .collect();
        if self.0.len() > SHOWN {
            let least = if self.0.len() < KEPT { "" } else { "at least " };
            parts.push(format!(
                "… and {least}{} more problems",
                self.0.len() - SHOWN
            ));
        }
        parts.join("\n\n")
    }
}

impl fmt::Display for SpecErrors {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.render(false))
    }
}

impl std::error::Error for SpecErrors {}

/// Problems of one text as they are found; the first few hundred are kept.
#[derive(Debug)]
pub(super) struct Problems<'t> {
    /// The file as the user named it.
    pub(super) file: &'t Path,
    /// The whole text.
    pub(super) text: &'t str,
    /// What was found so far.
    pub(super) found: Vec<Diagnostic>,
    /// Takes what is no longer kept.
    surplus: Diagnostic,
}

impl<'t> Problems<'t> {
    /// Nothing found yet.
    pub(super) fn new(file: &'t Path, text: &'t str) -> Self {
        Self {
            file,
            text,
            found: Vec::new(),
            surplus: Diagnostic::of_file(file, ""),
        }
    }

    /// Records a problem at a byte range; what was expected and how to mend it can be added to the result.
    pub(super) fn at(
        &mut self,
        span: &Range<usize>,
        message: impl Into<String>,
    ) -> &mut Diagnostic {
        if self.found.len() >= KEPT {
            return &mut self.surplus;
        }
        let diagnostic = Diagnostic::at(self.file, self.text, span, message);
        self.push(diagnostic)
    }

    /// Records a problem found elsewhere.
    pub(super) fn push(&mut self, diagnostic: Diagnostic) -> &mut Diagnostic {
        let place = self.found.len();
        if place >= KEPT {
            return &mut self.surplus;
        }
        self.found.push(diagnostic);
        &mut self.found[place]
    }

    /// All problems in the order of the text.
    pub(super) fn into_sorted(self) -> Vec<Diagnostic> {
        let mut found = self.found;
        let own = self.file;
        // Those of other files keep their place in the order in which they were found, after the spec's own.
        found.sort_by_key(|d| (d.file != own, d.span.as_ref().map(|s| (s.start, s.end))));
        found.dedup();
        found
    }
}

/// The last character boundary at or before a byte offset.
fn boundary_before(text: &str, offset: usize) -> usize {
    (0..=offset.min(text.len()))
        .rev()
        .find(|&i| text.is_char_boundary(i))
        .unwrap_or(0)
}

/// The word of `known` that `word` was most likely meant to be: at least half of it must be right.
pub(super) fn nearest<'k>(word: &str, known: impl IntoIterator<Item = &'k str>) -> Option<&'k str> {
    // Words are short; what is longer than this is no slip of the finger, and the distance costs its square.
    if word.len() > 60 {
        return None;
    }
    let lower = word.to_lowercase();
    known
        .into_iter()
        .map(|k| {
            let distance = strsim::damerau_levenshtein(&lower, &k.to_lowercase());
            (distance, k)
        })
        .filter(|(distance, k)| *distance <= k.chars().count().max(lower.chars().count()) / 2)
        .min_by_key(|(distance, _)| *distance)
        .map(|(_, k)| k)
}

/// "a", "a or b", "a, b or c".
pub(super) fn any_of<S: AsRef<str>>(words: &[S]) -> String {
    listed(words, "or")
}

/// "a", "a and b", "a, b and c".
pub(super) fn all_of<S: AsRef<str>>(words: &[S]) -> String {
    listed(words, "and")
}

fn listed<S: AsRef<str>>(words: &[S], last: &str) -> String {
    match words {
        [] => String::new(),
        [one] => one.as_ref().to_owned(),
        [head @ .., tail] => {
            let head: Vec<&str> = head.iter().map(AsRef::as_ref).collect();
            format!("{} {last} {}", head.join(", "), tail.as_ref())
        }
    }
}

/// A number as a person would write it: 1, 0.5, 1e-7.
pub(super) fn number(value: f64) -> String {
    let whole = value.abs() < 1e15 && value.fract().abs() < f64::MIN_POSITIVE;
    if whole {
        format!("{value}")
    } else {
        format!("{value:?}")
    }
}

/// A count and its noun: 1 point, 2 points.
pub(crate) fn counted(count: usize, noun: &str) -> String {
    let plural = if count == 1 { "" } else { "s" };
    format!("{count} {noun}{plural}")
}

/// A piece of the user's text made fit for a message: in quotes, shortened, without control characters.
pub(super) fn quoted(text: &str) -> String {
    let mut short: String = text
        .chars()
        .take(60)
        .map(|c| if c.is_control() { '\u{fffd}' } else { c })
        .collect();
    if text.chars().count() > 60 {
        short.push('…');
    }
    format!("\"{short}\"")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn line_and_column_count_characters_from_one() {
        let text = "é = 1\nx = \"ü\"\r\ny = 2";
        let place = text.find("\"ü").expect("in the text");
        let d = Diagnostic::at(Path::new("a.toml"), text, &(place..place + 4), "odd");
        assert_eq!((d.line, d.column), (Some(2), Some(5)));
        assert!(d.render(false).starts_with("a.toml:2:5: odd\n"), "{d}");
    }

    #[test]
    fn any_range_of_any_text_can_be_shown() {
        let text = "ä\n\n\t\u{0}b\u{1F600}x\r\n";
        for start in 0..=text.len() + 2 {
            for end in 0..=text.len() + 2 {
                let d = Diagnostic::at(Path::new("a"), text, &(start..end), "m");
                assert!(d.render(false).starts_with("a:"));
                assert!(!d.render(true).is_empty());
            }
        }
    }

    #[test]
    fn a_long_line_is_cut_around_the_place() {
        let text = format!("{}X{}", "a".repeat(5000), "b".repeat(5000));
        let d = Diagnostic::at(Path::new("a"), &text, &(5000..5001), "m");
        assert!(d.render(false).len() < 1000);
        assert_eq!(d.column, Some(5001));
    }

    #[test]
    fn the_nearest_word_is_suggested_only_when_it_is_near() {
        let known = ["geometry", "first", "last"];
        assert_eq!(nearest("frist", known), Some("first"));
        assert_eq!(nearest("LAST", known), Some("last"));
        assert_eq!(nearest("xyzzy", known), None);
        assert_eq!(nearest("", known), None);
    }

    #[test]
    fn lists_read_as_sentences() {
        assert_eq!(any_of(&["a", "b", "c"]), "a, b or c");
        assert_eq!(all_of(&["a", "b"]), "a and b");
        assert_eq!(any_of(&["a"]), "a");
    }
}
