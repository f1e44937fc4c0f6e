//! The look of all figures: sizes, inks, and the colour, marker and dash of each series.

use super::colour::Rgb;

/// Ink of titles and marks.
pub(super) const INK: Rgb = Rgb::hex(0x1B2530);
/// Ink of axes, axis labels and notes.
pub(super) const SLATE: Rgb = Rgb::hex(0x4A5561);
/// Lines of the reading grid.
pub(super) const HAIR: Rgb = Rgb::hex(0xE3E7EB);
/// Paper.
pub(super) const PAPER: Rgb = Rgb::hex(0xFFFFFF);
/// Valley floors and paths on energy maps.
pub(super) const PATH: Rgb = Rgb::hex(0x8C1D40);

/// Size of a figure's title, px per em.
pub(super) const TITLE_SIZE: f64 = 15.0;
/// Size of axis labels and legends.
pub(super) const LABEL_SIZE: f64 = 12.0;
/// Size of tick labels and values at marks.
pub(super) const TICK_SIZE: f64 = 11.0;
/// Size of notes and isoline labels.
pub(super) const NOTE_SIZE: f64 = 10.0;

/// Free border around everything, px.
pub(super) const MARGIN: f64 = 20.0;
/// Distance between the data area and the axis lines, which stand off from it.
pub(super) const AXIS_GAP: f64 = 6.0;

/// Series colours. Neighbours differ in lightness as well as hue, so that they stay apart in grey
/// and for colour-blind readers (checked in the tests below).
const SERIES: [Rgb; 8] = [
    Rgb::hex(0x1C355B),
    Rgb::hex(0xDA6615),
    Rgb::hex(0x8F4596),
    Rgb::hex(0x549FA1),
    Rgb::hex(0x354507),
    Rgb::hex(0xBF87EF),
    Rgb::hex(0xB45257),
    Rgb::hex(0xA9AF73),
];

/// The mark put on a data point.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Marker {
    Disc,
    Square,
    Diamond,
    Triangle,
    Wedge,
    Hexagon,
    Bar,
    Plank,
}

const MARKERS: [Marker; 8] = [
    Marker::Disc,
    Marker::Square,
    Marker::Triangle,
    Marker::Diamond,
    Marker::Wedge,
    Marker::Hexagon,
    Marker::Bar,
    Marker::Plank,
];

/// Lengths drawn and left out in turn, px; empty means a whole line.
pub(super) type Dash = &'static [f64];

/// A whole line.
pub(super) const WHOLE: Dash = &[];
/// First, second and third fitted curve of a level.
pub(super) const FIT_DASHES: [Dash; 3] = [&[5.0, 3.5], &[1.8, 2.6], &[12.0, 3.0, 2.0, 3.0]];
/// Limits and onsets.
pub(super) const DOTS: Dash = &[1.4, 3.4];

const DASHES: [Dash; 4] = [WHOLE, &[13.0, 3.0], &[11.0, 3.0, 2.0, 3.0], &[7.0, 2.6]];

/// Colour, marker and dash of one series, told apart by any one of the three.
#[derive(Debug, Clone, Copy)]
pub(super) struct SeriesStyle {
    pub(super) colour: Rgb,
    pub(super) marker: Marker,
    pub(super) dash: Dash,
}

/// The style of series number `index`; colours and markers return after eight, in new company.
pub(super) fn series(index: usize) -> SeriesStyle {
    let n = SERIES.len();
    SeriesStyle {
        colour: SERIES[index % n],
        marker: MARKERS[(index + index / n) % n],
        dash: DASHES[(index + index / n) % DASHES.len()],
    }
}

#[cfg(test)]
mod tests {
    use super::super::colour::{Rgb, distance};
    use super::*;

    /// Full protanopia and deuteranopia in linear sRGB: G. M. Machado, M. M. Oliveira,
    /// L. A. F. Fernandes, IEEE Trans. Vis. Comput. Graph. 15, 1291 (2009), table of severity 1.0
    /// (from memory).
    const PROTAN: [[f64; 3]; 3] = [
        [0.152_286, 1.052_583, -0.204_868],
        [0.114_503, 0.786_281, 0.099_216],
        [-0.003_882, -0.048_116, 1.051_998],
    ];
    const DEUTAN: [[f64; 3]; 3] = [
        [0.367_322, 0.860_646, -0.227_968],
        [0.280_085, 0.672_501, 0.047_413],
        [-0.011_820, 0.042_940, 0.968_881],
    ];

    fn seen(colour: Rgb, matrix: &[[f64; 3]; 3]) -> [f64; 3] {
        let c = colour.linear();
        Rgb::from_linear([0, 1, 2].map(|i| (0..3).map(|j| matrix[i][j] * c[j]).sum())).oklab()
    }

    #[test]
    fn series_colours_stay_apart_for_colour_blind_readers() {
        for (i, p) in SERIES.iter().enumerate() {
            for q in &SERIES[i + 1..] {
                for matrix in [&PROTAN, &DEUTAN] {
                    let d = distance(seen(*p, matrix), seen(*q, matrix));
                    assert!(d > 0.1, "{p:?} {q:?}: {d:.3}");
                }
            }
        }
    }

    #[test]
    fn neighbouring_series_differ_in_grey() {
        for pair in SERIES.windows(2) {
            let (p, q) = (pair[0].oklab()[0], pair[1].oklab()[0]);
            assert!((p - q).abs() > 0.1, "{pair:?}: {p:.2} {q:.2}");
        }
    }

    #[test]
    fn no_two_of_many_series_look_alike() {
        let looks: Vec<_> = (0..24)
            .map(|i| (series(i).colour.channels, series(i).marker))
            .collect();
        for (i, look) in looks.iter().enumerate() {
            assert!(!looks[i + 1..].contains(look));
        }
    }
}
