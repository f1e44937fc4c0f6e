//! Colours: conversions between sRGB and OKLab, legibility, and the ramp of energy maps.
//!
//! OKLab after B. Ottosson, "A perceptual color space for image processing" (2020),
//! matrices as published there; relative luminance and contrast after WCAG 2.1.

/// An opaque sRGB colour.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Rgb {
    /// red, green, blue, each 0–255
    pub(super) channels: [u8; 3],
}

impl Rgb {
    /// The colour written `0xRRGGBB`.
    pub(super) const fn hex(code: u32) -> Self {
        Self {
            channels: [(code >> 16) as u8, (code >> 8) as u8, code as u8],
        }
    }

    /// Linear-light red, green and blue, 0–1.
    pub(super) fn linear(self) -> [f64; 3] {
        self.channels.map(|channel| {
            let c = f64::from(channel) / 255.0;
            if c <= 0.04045 {
                c / 12.92
            } else {
                ((c + 0.055) / 1.055).powf(2.4)
            }
        })
    }

    /// The nearest displayable colour to linear-light red, green and blue.
    pub(super) fn from_linear(linear: [f64; 3]) -> Self {
        Self {
            channels: linear.map(|value| {
                let v = value.clamp(0.0, 1.0);
                let c = if v <= 0.003_130_8 {
                    12.92 * v
                } else {
                    1.055 * v.powf(1.0 / 2.4) - 0.055
                };
                (c * 255.0).round() as u8
            }),
        }
    }

    /// OKLab lightness L (0–1) and opponent coordinates a, b.
    pub(super) fn oklab(self) -> [f64; 3] {
        let [r, g, b] = self.linear();
        let l = (0.412_221_470_8 * r + 0.536_332_536_3 * g + 0.051_445_992_9 * b).cbrt();
        let m = (0.211_903_498_2 * r + 0.680_699_545_1 * g + 0.107_396_956_6 * b).cbrt();
        let s = (0.088_302_461_9 * r + 0.281_718_837_6 * g + 0.629_978_700_5 * b).cbrt();
        [
            0.210_454_255_3 * l + 0.793_617_785_0 * m - 0.004_072_046_8 * s,
            1.977_998_495_1 * l - 2.428_592_205_0 * m + 0.450_593_709_9 * s,
            0.025_904_037_1 * l + 0.782_771_766_2 * m - 0.808_675_766_0 * s,
        ]
    }

    /// The displayable colour nearest to OKLab coordinates.
    pub(super) fn from_oklab([lightness, a, b]: [f64; 3]) -> Self {
        let l = (lightness + 0.396_337_777_4 * a + 0.215_803_757_3 * b).powi(3);
        let m = (lightness - 0.105_561_345_8 * a - 0.063_854_172_8 * b).powi(3);
        let s = (lightness - 0.089_484_177_5 * a - 1.291_485_548_0 * b).powi(3);
        Self::from_linear([
            4.076_741_662_1 * l - 3.307_711_591_3 * m + 0.230_969_929_2 * s,
            -1.268_438_004_6 * l + 2.609_757_401_1 * m - 0.341_319_396_5 * s,
            -0.004_196_086_3 * l - 0.703_418_614_7 * m + 1.707_614_701_0 * s,
        ])
    }

    /// Contrast ratio against white, 1–21 (WCAG 2.1, "contrast ratio").
    pub(super) fn contrast_on_white(self) -> f64 {
        let [r, g, b] = self.linear();
        1.05 / (0.2126 * r + 0.7152 * g + 0.0722 * b + 0.05)
    }

    /// Whether white lines and letters show better on this colour than dark ones.
    pub(super) fn is_dark(self) -> bool {
        self.contrast_on_white() > 4.5
    }

    /// The same hue, darkened until small text in it reads well on white: contrast 4.5 or more
    /// (WCAG 2.1, level AA).
    pub(super) fn legible(self) -> Self {
        let [lightness, a, b] = self.oklab();
        let mut colour = self;
        let mut step = 0.0;
        while colour.contrast_on_white() < 4.5 && step < lightness {
            step += 0.01;
            // Chroma shrinks along with lightness so that the darker colour stays displayable.
            let keep = 1.0 - step / lightness;
            colour = Self::from_oklab([lightness - step, a * keep, b * keep]);
        }
        colour
    }
}

/// Deep blue of the valley floor to pale sand of the heights, in OKLCH: lightness, chroma, hue in
/// degrees. Lightness alone carries the order, so the ramp survives grey printing and every kind
/// of colour blindness.
const RAMP_ANCHORS: [[f64; 3]; 4] = [
    [0.42, 0.090, 262.0],
    [0.61, 0.092, 224.0],
    [0.81, 0.078, 160.0],
    [0.975, 0.045, 96.0],
];

/// The ramp at `n` evenly spaced stations, lowest first: equal perceived steps, since stations
/// lie at equal arc length along the path in OKLab.
pub(super) fn ramp(n: usize) -> Vec<Rgb> {
    const FINE: usize = 400;
    let path: Vec<[f64; 3]> = (0..=FINE)
        .map(|k| ramp_path(k as f64 / FINE as f64))
        .collect();
    let mut length = vec![0.0];
    for pair in path.windows(2) {
        let step = distance(pair[0], pair[1]);
        length.push(length[length.len() - 1] + step);
    }
    let total = length[FINE];
    (0..n)
        .map(|k| {
            let wanted = if n > 1 {
                total * k as f64 / (n - 1) as f64
            } else {
                0.0
            };
            let at = length.partition_point(|&l| l < wanted).min(FINE);
            Rgb::from_oklab(path[at])
        })
        .collect()
}

/// Euclidean distance of two OKLab colours: about 0.02 is just noticeable.
pub(super) fn distance(p: [f64; 3], q: [f64; 3]) -> f64 {
    p.iter()
        .zip(q)
        .map(|(u, v)| (u - v) * (u - v))
        .sum::<f64>()
        .sqrt()
}

fn ramp_path(t: f64) -> [f64; 3] {
    let spans = RAMP_ANCHORS.len() - 1;
    let k = ((t * spans as f64) as usize).min(spans - 1);
    let f = t * spans as f64 - k as f64;
    let mixed: Vec<f64> = (0..3)
        .map(|i| RAMP_ANCHORS[k][i] * (1.0 - f) + RAMP_ANCHORS[k + 1][i] * f)
        .collect();
    let hue = mixed[2].to_radians();
    [mixed[0], mixed[1] * hue.cos(), mixed[1] * hue.sin()]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn oklab_and_back_is_the_same_colour() {
        for code in [0x000000, 0xFFFFFF, 0x17457E, 0xD1590A, 0x5AA9DD] {
            let colour = Rgb::hex(code);
            assert_eq!(colour, Rgb::from_oklab(colour.oklab()));
        }
    }

    #[test]
    fn ramp_rises_in_lightness_by_equal_perceived_steps() {
        let colours: Vec<[f64; 3]> = ramp(12).into_iter().map(Rgb::oklab).collect();
        let steps: Vec<f64> = colours.windows(2).map(|p| distance(p[0], p[1])).collect();
        let mean = steps.iter().sum::<f64>() / steps.len() as f64;
        // Chords of a bent path and rounding to 8 bits leave a few per cent.
        assert!(
            steps.iter().all(|s| (s / mean - 1.0).abs() < 0.12),
            "{steps:?}"
        );
        assert!(colours.windows(2).all(|p| p[1][0] > p[0][0] + 0.02));
    }

    #[test]
    fn legible_colours_reach_the_contrast_and_keep_dark_ones() {
        assert!(Rgb::hex(0xE0B020).legible().contrast_on_white() >= 4.5);
        assert_eq!(Rgb::hex(0x17457E).legible(), Rgb::hex(0x17457E));
    }
}
