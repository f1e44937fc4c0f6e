//! Text as rows of words that know where they stand.

use super::geometry_error::{GeometryError, GeometryProblem};
use std::ops::Range;

/// A word and its bytes inside the whole text.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) struct Word<'a> {
    pub(super) text: &'a str,
    pub(super) span: Range<usize>,
}

impl Word<'_> {
    pub(super) fn error(&self, problem: GeometryProblem) -> GeometryError {
        GeometryError {
            span: self.span.clone(),
            problem,
        }
    }

    /// The finite number this word is; `what` names it in the message.
    pub(super) fn number(&self, what: &'static str) -> Result<f64, GeometryError> {
        match self.text.parse::<f64>() {
            Ok(value) if value.is_finite() => Ok(value),
            _ => Err(self.error(GeometryProblem::NotANumber {
                word: self.text.to_owned(),
                what,
            })),
        }
    }
}

/// The words of `line`, which begins at byte `start` of the text.
pub(super) fn words(line: &str, start: usize) -> Vec<Word<'_>> {
    let mut words = Vec::new();
    let mut begin = None;
    for (place, sign) in line.char_indices().chain([(line.len(), ' ')]) {
        match (begin, sign.is_whitespace()) {
            (None, false) => begin = Some(place),
            (Some(first), true) => {
                words.push(Word {
                    text: &line[first..place],
                    span: start + first..start + place,
                });
                begin = None;
            }
            _ => {}
        }
    }
    words
}

/// The lines of a text and the byte each begins at.
pub(super) fn lines(text: &str) -> impl Iterator<Item = (usize, &str)> {
    text.split_inclusive('\n').scan(0, |start, line| {
        let begin = *start;
        *start += line.len();
        Some((begin, line.trim_end_matches(['\n', '\r'])))
    })
}

/// Rows of words without comments (`#` to the end of the line) and empty lines.
pub(super) fn rows(text: &str) -> Vec<Vec<Word<'_>>> {
    lines(text)
        .map(|(start, line)| words(line.split('#').next().unwrap_or_default(), start))
        .filter(|row| !row.is_empty())
        .collect()
}

/// From the first to the last word of a row.
pub(super) fn span_of(row: &[Word<'_>]) -> Range<usize> {
    match (row.first(), row.last()) {
        (Some(first), Some(last)) => first.span.start..last.span.end,
        _ => 0..0,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn words_know_their_bytes() {
        let text = "# é comment\r\n  O1  0.5\t# behind\n\nH é\n";
        let rows = rows(text);
        assert_eq!(rows.len(), 2);
        for word in rows.iter().flatten() {
            assert_eq!(&text[word.span.clone()], word.text);
        }
        let texts: Vec<Vec<&str>> = rows
            .iter()
            .map(|row| row.iter().map(|w| w.text).collect())
            .collect();
        assert_eq!(texts, [vec!["O1", "0.5"], vec!["H", "é"]]);
        assert_eq!(&text[span_of(&rows[0])], "O1  0.5");
    }
}
