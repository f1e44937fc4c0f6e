//! The typeface of the figures, DejaVu Sans, carried in the program: widths, wrapping, and the
//! font database for rasterising.

use std::sync::{Arc, OnceLock};

use ab_glyph::{Font, FontRef};
use resvg::usvg::fontdb::Database;

/// Font family as written into the SVG; viewers without DejaVu Sans take their own sans-serif.
pub(super) const FAMILY: &str = "DejaVu Sans, sans-serif";

/// Height of capitals and figures of DejaVu Sans above the baseline, in em (font's OS/2 table).
pub(super) const CAP_HEIGHT: f64 = 0.729;

/// A weight of the typeface.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Weight {
    Regular,
    Bold,
}

/// The database that rasterising looks fonts up in: the two embedded faces and nothing of the
/// system's, so that figures are the same everywhere.
pub(super) fn database() -> Arc<Database> {
    static DATABASE: OnceLock<Arc<Database>> = OnceLock::new();
    DATABASE
        .get_or_init(|| {
            let mut database = Database::new();
            database.load_font_data(dejavu::sans::regular().to_vec());
            database.load_font_data(dejavu::sans::bold().to_vec());
            database.set_sans_serif_family("DejaVu Sans");
            Arc::new(database)
        })
        .clone()
}

fn face(weight: Weight) -> Option<&'static FontRef<'static>> {
    static REGULAR: OnceLock<Option<FontRef<'static>>> = OnceLock::new();
    static BOLD: OnceLock<Option<FontRef<'static>>> = OnceLock::new();
    match weight {
        Weight::Regular => {
            REGULAR.get_or_init(|| FontRef::try_from_slice(dejavu::sans::regular()).ok())
        }
        Weight::Bold => BOLD.get_or_init(|| FontRef::try_from_slice(dejavu::sans::bold()).ok()),
    }
    .as_ref()
}

/// Advance width of a line of text, px, at `size` px per em.
pub(super) fn width(text: &str, size: f64, weight: Weight) -> f64 {
    let Some(face) = face(weight) else {
        // Only a broken build lacks the face; a mean width keeps the layout sane.
        return 0.6 * size * text.chars().count() as f64;
    };
    let units = f64::from(face.units_per_em().unwrap_or(2048.0));
    text.chars()
        .map(|c| f64::from(face.h_advance_unscaled(face.glyph_id(c))))
        .sum::<f64>()
        * size
        / units
}

/// Text broken at spaces into at most `lines` lines no wider than `limit` px; what does not fit
/// ends in an ellipsis.
pub(super) fn wrap(text: &str, size: f64, weight: Weight, limit: f64, lines: usize) -> Vec<String> {
    let mut out: Vec<String> = Vec::new();
    let mut line = String::new();
    let words: Vec<&str> = text.split_whitespace().collect();
    for (k, word) in words.iter().enumerate() {
        let longer = if line.is_empty() {
            (*word).to_owned()
        } else {
            format!("{line} {word}")
        };
        if width(&longer, size, weight) <= limit || line.is_empty() {
            line = longer;
        } else if out.len() + 1 < lines {
            out.push(std::mem::replace(&mut line, (*word).to_owned()));
        } else {
            line = format!("{line} {}", words[k..].join(" "));
            break;
        }
    }
    out.push(shorten(&line, size, weight, limit));
    out
}

/// The text itself, or its longest beginning that fits `limit` px together with an ellipsis.
pub(super) fn shorten(text: &str, size: f64, weight: Weight, limit: f64) -> String {
    if width(text, size, weight) <= limit {
        return text.to_owned();
    }
    let mut kept: Vec<char> = text.chars().collect();
    while !kept.is_empty() {
        kept.pop();
        let short = format!("{}…", kept.iter().collect::<String>().trim_end());
        if width(&short, size, weight) <= limit {
            return short;
        }
    }
    "…".to_owned()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn face_has_every_sign_the_figures_write() {
        let face = face(Weight::Regular).expect("embedded face parses");
        for c in "−⟨⟩²³⁻¹₀₂ₑÅ°ω≥≤–…×∠→↑".chars() {
            assert!(face.glyph_id(c).0 != 0, "{c}");
        }
    }

    #[test]
    fn wrapped_lines_fit_and_lose_nothing_when_there_is_room() {
        let text = "Water, one O–H bond stretched at three levels of theory";
        let lines = wrap(text, 15.0, Weight::Bold, 200.0, 9);
        assert!(lines.len() > 1);
        assert!(lines.iter().all(|l| width(l, 15.0, Weight::Bold) <= 200.0));
        assert_eq!(lines.join(" "), text);
        let cut = wrap(text, 15.0, Weight::Bold, 200.0, 2);
        assert_eq!(cut.len(), 2);
        assert!(cut[1].ends_with('…') && width(&cut[1], 15.0, Weight::Bold) <= 200.0);
    }
}
