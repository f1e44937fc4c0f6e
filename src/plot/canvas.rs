//! A sheet to draw on, and its way to SVG and PNG.
//!
//! Shapes are collected in px with fractions. The SVG back end rounds to whole units, so the sheet
//! is drawn ten times as large and the view box scales it down again: curves stay smooth. The PNG
//! is that very SVG, rasterised.

use plotters::backend::{DrawingBackend, SVGBackend};
use plotters::style::text_anchor::{HPos, Pos, VPos};
use plotters::style::{FontFamily, FontStyle, RGBAColor, ShapeStyle, TextStyle};
use resvg::{tiny_skia, usvg};

use super::colour::Rgb;
use super::font::{self, Weight};
use super::style::{Dash, Marker, PAPER, WHOLE};
use super::{Figure, PlotError};

/// Units of the view box per px.
const UNITS_PER_PX: f64 = 10.0;
/// PNG pixels per px of the SVG.
const PNG_SCALE: f32 = 2.0;
/// The SVG back end writes a font size 1.24 times smaller than asked for.
const BACKEND_FONT_RATIO: f64 = 1.24;

/// A point on the sheet, px from the upper left corner.
pub(super) type Px = (f64, f64);

/// Colour, opacity, width and dash of a line.
#[derive(Debug, Clone, Copy)]
pub(super) struct Stroke {
    pub(super) colour: Rgb,
    pub(super) opacity: f64,
    pub(super) width: f64,
    pub(super) dash: Dash,
}

impl Stroke {
    pub(super) fn new(colour: Rgb, width: f64) -> Self {
        Self {
            colour,
            opacity: 1.0,
            width,
            dash: WHOLE,
        }
    }

    pub(super) fn dashed(self, dash: Dash) -> Self {
        Self { dash, ..self }
    }

    pub(super) fn faint(self, opacity: f64) -> Self {
        Self { opacity, ..self }
    }
}

/// Which part of a text stands at its position.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Anchor {
    Start,
    Middle,
    End,
}

/// Size, weight, colour and anchor of a text.
#[derive(Debug, Clone, Copy)]
pub(super) struct Lettering {
    pub(super) size: f64,
    pub(super) weight: Weight,
    pub(super) colour: Rgb,
    pub(super) anchor: Anchor,
}

impl Lettering {
    pub(super) fn new(size: f64, colour: Rgb, anchor: Anchor) -> Self {
        Self {
            size,
            weight: Weight::Regular,
            colour,
            anchor,
        }
    }

    pub(super) fn bold(self) -> Self {
        Self {
            weight: Weight::Bold,
            ..self
        }
    }
}

#[derive(Debug, Clone)]
enum Shape {
    Line(Vec<Px>, Stroke),
    Area(Vec<Px>, Rgb, f64),
    Disc(Px, f64, Rgb),
    Ring(Px, f64, Stroke),
    Text(Px, String, Lettering),
}

/// A sheet of given size collecting shapes, later ones on top.
#[derive(Debug, Clone)]
pub(super) struct Canvas {
    width: f64,
    height: f64,
    shapes: Vec<Shape>,
}

impl Canvas {
    pub(super) fn new(width: f64, height: f64) -> Self {
        Self {
            width: width.ceil(),
            height: height.ceil(),
            shapes: Vec::new(),
        }
    }

    /// Sets the size of the sheet; drawing may have begun.
    pub(super) fn resize(&mut self, width: f64, height: f64) {
        self.width = width.ceil();
        self.height = height.ceil();
    }

    /// Makes the sheet at least this large.
    pub(super) fn grow(&mut self, width: f64, height: f64) {
        self.width = self.width.max(width.ceil());
        self.height = self.height.max(height.ceil());
    }

    /// A line through the points, cut into dashes along its length where the stroke asks for it.
    pub(super) fn line(&mut self, points: &[Px], stroke: Stroke) {
        if points.len() < 2 {
            return;
        }
        if stroke.dash.is_empty() {
            self.shapes.push(Shape::Line(points.to_vec(), stroke));
        } else {
            for piece in dashes(points, stroke.dash) {
                self.shapes.push(Shape::Line(piece, stroke));
            }
        }
    }

    pub(super) fn segment(&mut self, from: Px, to: Px, stroke: Stroke) {
        self.line(&[from, to], stroke);
    }

    pub(super) fn area(&mut self, points: Vec<Px>, colour: Rgb, opacity: f64) {
        if points.len() > 2 {
            self.shapes.push(Shape::Area(points, colour, opacity));
        }
    }

    pub(super) fn disc(&mut self, centre: Px, radius: f64, colour: Rgb) {
        self.shapes.push(Shape::Disc(centre, radius, colour));
    }

    pub(super) fn ring(&mut self, centre: Px, radius: f64, stroke: Stroke) {
        self.shapes.push(Shape::Ring(centre, radius, stroke));
    }

    /// A line of text; `at` is the middle of the height of its capitals and figures.
    pub(super) fn text(&mut self, at: Px, text: &str, lettering: Lettering) {
        if !text.trim().is_empty() {
            self.shapes
                .push(Shape::Text(at, text.trim().to_owned(), lettering));
        }
    }

    /// A filled mark with a thin paper-coloured rim, `radius` px large.
    pub(super) fn marker(&mut self, at: Px, radius: f64, marker: Marker, colour: Rgb) {
        let rim = if radius > 1.6 { 0.9 } else { 0.0 };
        for (grow, ink) in [(rim, PAPER), (0.0, colour)] {
            if grow <= 0.0 && ink == PAPER {
                continue;
            }
            match outline(marker, radius + grow) {
                None => self.disc(at, radius + grow, ink),
                Some(shape) => self.area(
                    shape.iter().map(|(x, y)| (at.0 + x, at.1 + y)).collect(),
                    ink,
                    1.0,
                ),
            }
        }
    }

    /// The finished figure. Title and description are for readers who cannot see it.
    pub(super) fn finish(self, title: &str, description: &str) -> Result<Figure, PlotError> {
        let size = (
            (self.width * UNITS_PER_PX) as u32,
            (self.height * UNITS_PER_PX) as u32,
        );
        let mut drawn = String::new();
        {
            let mut backend = SVGBackend::with_string(&mut drawn, size);
            let corner = (size.0 as i32, size.1 as i32);
            backend
                .draw_rect((0, 0), corner, &paint(PAPER, 1.0), true)
                .map_err(refused)?;
            for shape in &self.shapes {
                emit(&mut backend, shape)?;
            }
            backend.present().map_err(refused)?;
        }
        Ok(Figure {
            svg: dress(&drawn, (self.width, self.height), title, description),
        })
    }
}

fn paint(colour: Rgb, opacity: f64) -> RGBAColor {
    let [r, g, b] = colour.channels;
    RGBAColor(r, g, b, opacity)
}

fn units(length: f64) -> u32 {
    (length * UNITS_PER_PX).round().max(1.0) as u32
}

/// Whole units of the view box; a coordinate that is no number (or is absurdly far off) is `None`.
fn place((x, y): Px) -> Option<(i32, i32)> {
    let (x, y) = (x * UNITS_PER_PX, y * UNITS_PER_PX);
    (x.abs() < 1e8 && y.abs() < 1e8).then(|| (x.round() as i32, y.round() as i32))
}

fn refused(error: impl std::error::Error) -> PlotError {
    PlotError::Drawing {
        message: error.to_string(),
    }
}

fn emit(backend: &mut SVGBackend<'_>, shape: &Shape) -> Result<(), PlotError> {
    let drawn = match shape {
        Shape::Line(points, stroke) => {
            let style = ShapeStyle {
                color: paint(stroke.colour, stroke.opacity),
                filled: false,
                stroke_width: units(stroke.width),
            };
            backend.draw_path(places(points), &style)
        }
        Shape::Area(points, colour, opacity) => {
            backend.fill_polygon(places(points), &paint(*colour, *opacity))
        }
        Shape::Disc(centre, radius, colour) => match place(*centre) {
            Some(at) => backend.draw_circle(at, units(*radius), &paint(*colour, 1.0), true),
            None => Ok(()),
        },
        Shape::Ring(centre, radius, stroke) => match place(*centre) {
            Some(at) => {
                let style = ShapeStyle {
                    color: paint(stroke.colour, stroke.opacity),
                    filled: false,
                    stroke_width: units(stroke.width),
                };
                backend.draw_circle(at, units(*radius), &style, false)
            }
            None => Ok(()),
        },
        Shape::Text(at, text, lettering) => {
            // The back end's "centre" puts the baseline 0.25 em (half an ex) below the position.
            let lift = (0.5 * font::CAP_HEIGHT - 0.25) * lettering.size;
            let Some(at) = place((at.0, at.1 + lift)) else {
                return Ok(());
            };
            let style = match lettering.weight {
                Weight::Regular => FontStyle::Normal,
                Weight::Bold => FontStyle::Bold,
            };
            let h_pos = match lettering.anchor {
                Anchor::Start => HPos::Left,
                Anchor::Middle => HPos::Center,
                Anchor::End => HPos::Right,
            };
            let size = lettering.size * UNITS_PER_PX * BACKEND_FONT_RATIO;
            let ink = paint(lettering.colour, 1.0);
            let text_style = TextStyle::from((FontFamily::Name(font::FAMILY), size, style))
                .color(&ink)
                .pos(Pos::new(h_pos, VPos::Center));
            backend.draw_text(text, &text_style, at)
        }
    };
    drawn.map_err(refused)
}

fn places(points: &[Px]) -> Vec<(i32, i32)> {
    let mut out: Vec<(i32, i32)> = Vec::with_capacity(points.len());
    for at in points.iter().filter_map(|&p| place(p)) {
        if out.last() != Some(&at) {
            out.push(at);
        }
    }
    out
}

/// Corners of a mark about the origin, or `None` for a disc. Sizes are matched by eye to a disc of
/// the same radius.
fn outline(marker: Marker, radius: f64) -> Option<Vec<Px>> {
    let polygon = |corners: usize, scale: f64, turn: f64| {
        (0..corners)
            .map(|k| {
                let angle = (turn + 360.0 * k as f64 / corners as f64).to_radians();
                (scale * radius * angle.cos(), scale * radius * angle.sin())
            })
            .collect::<Vec<Px>>()
    };
    let block = |w: f64, h: f64| {
        let (w, h) = (w * radius, h * radius);
        vec![(-w, -h), (w, -h), (w, h), (-w, h)]
    };
    match marker {
        Marker::Disc => None,
        Marker::Square => Some(block(0.9, 0.9)),
        Marker::Diamond => Some(polygon(4, 1.3, 0.0)),
        Marker::Triangle => Some(polygon(3, 1.35, -90.0)),
        Marker::Wedge => Some(polygon(3, 1.35, 90.0)),
        Marker::Hexagon => Some(polygon(6, 1.1, 0.0)),
        Marker::Bar => Some(block(0.5, 1.35)),
        Marker::Plank => Some(block(1.35, 0.5)),
    }
}

/// A line cut into the drawn pieces of a dash pattern, measured along its length.
fn dashes(points: &[Px], dash: Dash) -> Vec<Vec<Px>> {
    let mut pieces = Vec::new();
    let mut index = 0;
    let mut left = dash[0];
    let mut piece = vec![points[0]];
    for pair in points.windows(2) {
        let (p, q) = (pair[0], pair[1]);
        let length = (q.0 - p.0).hypot(q.1 - p.1);
        if !length.is_finite() {
            continue;
        }
        let mut done = 0.0;
        while length - done > left {
            done += left;
            let at = (
                p.0 + (q.0 - p.0) * done / length,
                p.1 + (q.1 - p.1) * done / length,
            );
            if index % 2 == 0 {
                piece.push(at);
                pieces.push(std::mem::take(&mut piece));
            } else {
                piece = vec![at];
            }
            index = (index + 1) % dash.len();
            left = dash[index];
        }
        left -= length - done;
        if index % 2 == 0 {
            piece.push(q);
        }
    }
    if index % 2 == 0 && piece.len() > 1 {
        pieces.push(piece);
    }
    pieces
}

/// The back end's drawing with our own head (real size, name, description, round line ends) and
/// with each text on one line, so that viewers add no space to it.
fn dress(drawn: &str, (width, height): Px, title: &str, description: &str) -> String {
    let mut out = format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" width=\"{width}\" height=\"{height}\" \
         viewBox=\"0 0 {} {}\" role=\"img\" aria-labelledby=\"figure-title figure-desc\" \
         stroke-linejoin=\"round\" stroke-linecap=\"butt\">\n\
         <title id=\"figure-title\">{}</title>\n<desc id=\"figure-desc\">{}</desc>\n",
        width * UNITS_PER_PX,
        height * UNITS_PER_PX,
        escape(title),
        escape(description),
    );
    let mut in_text = false;
    for line in drawn.lines().skip(1) {
        let line = line.replace(" opacity=\"1\"", "");
        if line.starts_with("<text") {
            in_text = true;
        } else if line == "</text>" {
            in_text = false;
        }
        out.push_str(line.trim_end());
        if !in_text {
            out.push('\n');
        }
    }
    out
}

fn escape(text: &str) -> String {
    text.chars()
        .filter(|c| !c.is_control())
        .map(|c| match c {
            '&' => "&amp;".to_owned(),
            '<' => "&lt;".to_owned(),
            '>' => "&gt;".to_owned(),
            '"' => "&quot;".to_owned(),
            other => other.to_string(),
        })
        .collect()
}

/// An SVG of ours as PNG bytes, two pixels to the px, on the SVG's own white.
pub(super) fn rasterise(svg: &str) -> Result<Vec<u8>, PlotError> {
    let failed = |message: String| PlotError::Raster { message };
    let options = usvg::Options {
        font_family: "DejaVu Sans".to_owned(),
        fontdb: font::database(),
        ..usvg::Options::default()
    };
    let tree = usvg::Tree::from_str(svg, &options).map_err(|e| failed(e.to_string()))?;
    let size = tree.size();
    let (width, height) = (size.width() * PNG_SCALE, size.height() * PNG_SCALE);
    let mut pixels = tiny_skia::Pixmap::new(width.round() as u32, height.round() as u32)
        .ok_or_else(|| failed(format!("no room for {width} × {height} pixels")))?;
    resvg::render(
        &tree,
        tiny_skia::Transform::from_scale(PNG_SCALE, PNG_SCALE),
        &mut pixels.as_mut(),
    );
    pixels.encode_png().map_err(|e| failed(e.to_string()))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn dashes_cover_the_drawn_share_of_a_bent_line() {
        let line = [(0.0, 0.0), (30.0, 0.0), (30.0, 70.0)];
        let length: f64 = dashes(&line, &[6.0, 4.0])
            .iter()
            .flat_map(|piece| piece.windows(2))
            .map(|p| (p[1].0 - p[0].0).hypot(p[1].1 - p[0].1))
            .sum();
        assert!((length - 60.0).abs() < 1e-9, "{length}");
    }

    #[test]
    fn sheet_names_itself_and_escapes_what_it_is_told() {
        let mut canvas = Canvas::new(100.0, 50.0);
        canvas.text(
            (10.0, 20.0),
            "a < b & c",
            Lettering::new(11.0, PAPER, Anchor::Start),
        );
        canvas.line(
            &[(0.0, f64::NAN), (1.0, 1.0), (2.0, 2.0)],
            Stroke::new(PAPER, 1.0),
        );
        let figure = canvas.finish("O–H <stretch>", "one & two").expect("draws");
        assert!(figure.svg.contains("O–H &lt;stretch&gt;</title>"));
        assert!(figure.svg.contains(">a &lt; b &amp; c</text>"));
        assert!(!figure.svg.contains("NaN"));
        assert!(figure.png().expect("rasterises").starts_with(b"\x89PNG"));
    }
}
