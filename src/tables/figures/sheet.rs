//! The sheet a figure is drawn on: shapes in pixels go in, one finished SVG text comes out.
//!
//! The drawing is made by `plotters` on a sheet ten times as large, whose whole pixels are tenths of
//! ours. Afterwards the root element gets its title, description and role in place of a fixed size,
//! curves get the dashes of their methods, and exponents are raised. Not for axes or legends.

use plotters::coord::Shift;
use plotters::element::{PathElement, Polygon, Rectangle, Text};
use plotters::prelude::{DrawingArea, IntoDrawingArea, IntoFont, SVGBackend};
use plotters::style::text_anchor::{HPos, Pos, VPos};
use plotters::style::{Color, FontTransform, RGBColor, ShapeStyle};

use super::style::{INK, PAPER, Pen, clean};

/// Width of every figure, in pixels.
pub(super) const WIDTH: f64 = 680.0;

/// Tenths of a pixel in a pixel.
const FINE: f64 = 10.0;

/// Width of a method's curve, in pixels; nothing but a method's curve has this width.
const CURVE: f64 = 2.2;

/// Stand around an exponent in a text, so that it is raised.
const RAISE: char = '\u{E000}';
const LOWER: char = '\u{E001}';

/// Returns ten to a power as a text that the sheet writes with a raised exponent.
pub(super) fn power_of_ten(exponent: i32) -> String {
    format!("10{RAISE}{}{LOWER}", exponent.to_string().replace('-', "\u{2212}"))
}

/// Where a text stands against its point.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Anchor {
    /// Begins at the point.
    Start,
    /// Is centred on the point.
    Middle,
    /// Ends at the point.
    End,
    /// Is centred on the point and read upwards.
    Upwards,
}

/// Whether a marker is filled.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Fill {
    /// Filled with the method's colour.
    Full,
    /// Empty, with an edge of the method's colour.
    Hollow,
    /// Filled, with a dark edge around.
    Edged,
}

/// A sheet under the pen.
pub(super) struct Sheet<'a> {
    area: DrawingArea<SVGBackend<'a>, Shift>,
}

/// Draws on a sheet of this height, in pixels, and returns the SVG text. `pens` are those that curves
/// are drawn with.
pub(super) fn draw(
    name: &str,
    title: &str,
    description: &str,
    height: f64,
    pens: &[Pen],
    work: impl FnOnce(&Sheet<'_>),
) -> String {
    let size = ((WIDTH * FINE) as u32, (height * FINE).ceil() as u32);
    let mut raw = String::new();
    {
        let area = SVGBackend::with_string(&mut raw, size).into_drawing_area();
        let sheet = Sheet { area };
        sheet.rect(0.0, 0.0, WIDTH, height, PAPER);
        work(&sheet);
        sheet.area.present().expect("memory takes the drawing");
    }
    finish(&raw, name, title, description, size, pens)
}

fn fine(x: f64, y: f64) -> (i32, i32) {
    ((x * FINE).round() as i32, (y * FINE).round() as i32)
}

impl Sheet<'_> {
    /// Draws a straight or broken line.
    pub(super) fn line(&self, points: &[(f64, f64)], colour: RGBColor, width: f64) {
        self.path(points, ShapeStyle::from(&colour).stroke_width((width * FINE) as u32));
    }

    /// Draws a line that lets what is below shine through.
    pub(super) fn faint_line(&self, points: &[(f64, f64)], colour: RGBColor, width: f64) {
        self.path(points, colour.mix(0.5).stroke_width((width * FINE) as u32));
    }

    /// Draws the curve of a method, with its dashes.
    pub(super) fn curve(&self, points: &[(f64, f64)], pen: &Pen) {
        self.line(points, pen.colour, CURVE);
    }

    fn path(&self, points: &[(f64, f64)], style: ShapeStyle) {
        let mut path: Vec<(i32, i32)> = points.iter().map(|point| fine(point.0, point.1)).collect();
        path.dedup();
        if path.len() > 1 {
            self.area.draw(&PathElement::new(path, style)).expect("memory takes a line");
        }
    }

    /// Fills a rectangle.
    pub(super) fn rect(&self, left: f64, top: f64, right: f64, bottom: f64, colour: RGBColor) {
        let corners = [fine(left, top), fine(right, bottom)];
        self.area
            .draw(&Rectangle::new(corners, colour.filled()))
            .expect("memory takes a rectangle");
    }

    /// Draws the edge of a rectangle.
    pub(super) fn frame(&self, left: f64, top: f64, right: f64, bottom: f64) {
        let corners =
            [(left, top), (right, top), (right, bottom), (left, bottom), (left, top), (right, top)];
        self.line(&corners, INK, 1.0);
    }

    /// Draws a method's marker of this radius, in pixels.
    pub(super) fn marker(&self, at: (f64, f64), radius: f64, pen: &Pen, fill: Fill) {
        let mut corners: Vec<(i32, i32)> = pen
            .shape
            .iter()
            .map(|(angle, reach)| {
                let (sine, cosine) = angle.to_radians().sin_cos();
                fine(at.0 + radius * reach * cosine, at.1 - radius * reach * sine)
            })
            .collect();
        if fill != Fill::Hollow {
            self.area
                .draw(&Polygon::new(corners.clone(), pen.colour.filled()))
                .expect("memory takes a marker");
        }
        let edge = match fill {
            Fill::Full => return,
            Fill::Hollow => ShapeStyle::from(&pen.colour).stroke_width(12),
            Fill::Edged => ShapeStyle::from(&INK).stroke_width(18),
        };
        corners.push(corners[0]);
        corners.push(corners[1]);
        self.area.draw(&PathElement::new(corners, edge)).expect("memory takes a marker");
    }

    /// Writes a text whose middle line runs through the point.
    pub(super) fn text(&self, at: (f64, f64), text: &str, size: f64, anchor: Anchor) {
        self.coloured_text(at, text, size, anchor, INK);
    }

    /// Writes a text in a colour.
    pub(super) fn coloured_text(
        &self,
        at: (f64, f64),
        text: &str,
        size: f64,
        anchor: Anchor,
        colour: RGBColor,
    ) {
        let across = match anchor {
            Anchor::Start => HPos::Left,
            Anchor::Middle | Anchor::Upwards => HPos::Center,
            Anchor::End => HPos::Right,
        };
        // The backend divides the size by 1.24.
        let font = ("sans-serif", size * FINE * 1.24).into_font();
        let font =
            if anchor == Anchor::Upwards { font.transform(FontTransform::Rotate270) } else { font };
        let style = font.color(&colour).pos(Pos::new(across, VPos::Center));
        self.area
            .draw(&Text::new(text.to_owned(), fine(at.0, at.1), style))
            .expect("memory takes a text");
    }
}

fn escape(text: &str) -> String {
    text.replace('&', "&amp;")
        .replace('<', "&lt;")
        .replace('>', "&gt;")
        .replace('"', "&quot;")
        .replace('\'', "&apos;")
}

/// Turns what the backend wrote, one element or text a line, into the finished figure.
fn finish(
    raw: &str,
    name: &str,
    title: &str,
    description: &str,
    size: (u32, u32),
    pens: &[Pen],
) -> String {
    let mut out = format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {} {}\" role=\"img\" \
         aria-labelledby=\"figure-{name}-title figure-{name}-desc\" font-family=\"sans-serif\" \
         stroke-linejoin=\"round\" style=\"display:block;width:100%;max-width:900px;height:auto\">\n\
         <title id=\"figure-{name}-title\">{}</title>\n<desc id=\"figure-{name}-desc\">{}</desc>\n",
        size.0,
        size.1,
        escape(&clean(title)),
        escape(&clean(description))
    );
    let dashes: Vec<(String, String)> = pens
        .iter()
        .filter(|pen| !pen.dash.is_empty())
        .map(|pen| {
            let RGBColor(red, green, blue) = pen.colour;
            let lengths: Vec<String> =
                pen.dash.iter().map(|length| (length * FINE as u32).to_string()).collect();
            let mark = format!(
                "stroke=\"#{red:02X}{green:02X}{blue:02X}\" stroke-width=\"{}\"",
                CURVE * FINE
            );
            (mark, lengths.join(" "))
        })
        .collect();
    for line in raw.lines().skip(1) {
        if line.starts_with("<text") {
            out += &line.replace(" font-family=\"sans-serif\"", "").replace(" opacity=\"1\"", "");
        } else if line.starts_with("<polyline") {
            let line = line.replace(" opacity=\"1\"", "").replace(" \"/>", "\"/>");
            let dash = dashes.iter().find(|(mark, _)| line.contains(mark.as_str()));
            match dash {
                Some((_, lengths)) => {
                    let dashed = format!("<polyline stroke-dasharray=\"{lengths}\"");
                    out += &line.replacen("<polyline", &dashed, 1);
                }
                None => out += &line,
            }
            out.push('\n');
        } else if line.starts_with('<') {
            out += &line
                .replace(" opacity=\"1\"", "")
                .replace(" stroke=\"none\"", "")
                .replace(" \"/>", "\"/>");
            out.push('\n');
        } else {
            out += &line
                .replace(RAISE, "<tspan dy=\"-0.45em\" font-size=\"75%\">")
                .replace(LOWER, "</tspan>");
        }
    }
    out
}
