//! Colours, dashes, marker shapes and text widths: what keeps methods apart, also in grey print.
//!
//! Not for layout. The colours lean on those of M. Okabe and K. Ito (Color Universal Design, 2008;
//! from memory), darkened where needed to 3:1 contrast on white, in an order of our own.

use plotters::style::RGBColor;

/// Colour of text and frames.
pub(super) const INK: RGBColor = RGBColor(0x2B, 0x2B, 0x2B);
/// Colour of grid lines.
pub(super) const GRID: RGBColor = RGBColor(0xDD, 0xDD, 0xDD);
/// Colour of the paper.
pub(super) const PAPER: RGBColor = RGBColor(0xFF, 0xFF, 0xFF);

/// Size of labels and legends, in pixels of a figure 680 wide.
pub(super) const FONT: f64 = 14.0;
/// Size of tick labels and numbers in cells.
pub(super) const SMALL: f64 = 13.0;

const COLOURS: [RGBColor; 12] = [
    RGBColor(0x00, 0x72, 0xB2),
    RGBColor(0xD5, 0x5E, 0x00),
    RGBColor(0x00, 0x8F, 0x68),
    RGBColor(0xB8, 0x55, 0x90),
    RGBColor(0x00, 0x00, 0x00),
    RGBColor(0xB8, 0x86, 0x00),
    RGBColor(0x2F, 0x93, 0xCE),
    RGBColor(0x6A, 0x3D, 0x9A),
    RGBColor(0x8A, 0x5A, 0x2B),
    RGBColor(0x80, 0x80, 0x80),
    RGBColor(0x8F, 0x10, 0x2C),
    RGBColor(0x3F, 0x6B, 0x1F),
];

/// Lengths of dashes and gaps, in pixels; empty is solid.
const DASHES: [&[u32]; 12] = [
    &[],
    &[9, 4],
    &[2, 3],
    &[10, 3, 2, 3],
    &[5, 3],
    &[14, 4],
    &[10, 3, 2, 3, 2, 3],
    &[4, 2, 1, 2],
    &[16, 3, 5, 3],
    &[1, 4],
    &[7, 2, 7, 6],
    &[3, 6],
];

/// How one method is drawn.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Pen {
    /// Colour, different for every method.
    pub(super) colour: RGBColor,
    /// Lengths of dashes and gaps, in pixels.
    pub(super) dash: &'static [u32],
    /// Marker shape.
    pub(super) shape: Shape,
}

/// Returns the pen of the method of this index. From the thirteenth on, colours come back with a
/// last bit changed, so that a colour still names its method, under other dashes and shapes.
pub(super) fn pen(method: usize) -> Pen {
    let (lap, at) = (method / COLOURS.len(), method % COLOURS.len());
    let RGBColor(red, green, blue) = COLOURS[at];
    let nudged = if blue >= 0x80 { blue - lap.min(60) as u8 } else { blue + lap.min(60) as u8 };
    Pen {
        colour: RGBColor(red, green, nudged),
        dash: DASHES[(at + 5 * lap) % DASHES.len()],
        shape: SHAPES[(at + 7 * lap) % SHAPES.len()],
    }
}

/// A marker shape: corners on a circle of radius one, at these angles (in degrees) and radii.
pub(super) type Shape = &'static [(f64, f64)];

const SHAPES: [Shape; 12] = [
    // Octagon, as good as a circle at this size.
    &[
        (22.5, 0.9),
        (67.5, 0.9),
        (112.5, 0.9),
        (157.5, 0.9),
        (202.5, 0.9),
        (247.5, 0.9),
        (292.5, 0.9),
        (337.5, 0.9),
    ],
    // Square.
    &[(45.0, 1.1), (135.0, 1.1), (225.0, 1.1), (315.0, 1.1)],
    // Triangle up.
    &[(90.0, 1.25), (210.0, 1.25), (330.0, 1.25)],
    // Diamond.
    &[(0.0, 1.2), (90.0, 1.2), (180.0, 1.2), (270.0, 1.2)],
    // Triangle down.
    &[(270.0, 1.25), (30.0, 1.25), (150.0, 1.25)],
    // Four-pointed star.
    &[
        (0.0, 1.4),
        (45.0, 0.45),
        (90.0, 1.4),
        (135.0, 0.45),
        (180.0, 1.4),
        (225.0, 0.45),
        (270.0, 1.4),
        (315.0, 0.45),
    ],
    // Cross of two bars.
    &[
        (28.0, 1.25),
        (62.0, 1.25),
        (90.0, 0.5),
        (118.0, 1.25),
        (152.0, 1.25),
        (180.0, 0.5),
        (208.0, 1.25),
        (242.0, 1.25),
        (270.0, 0.5),
        (298.0, 1.25),
        (332.0, 1.25),
        (0.0, 0.5),
    ],
    // Triangle left.
    &[(180.0, 1.25), (60.0, 1.25), (300.0, 1.25)],
    // Plus.
    &[
        (17.0, 1.25),
        (45.0, 0.5),
        (73.0, 1.25),
        (107.0, 1.25),
        (135.0, 0.5),
        (163.0, 1.25),
        (197.0, 1.25),
        (225.0, 0.5),
        (253.0, 1.25),
        (287.0, 1.25),
        (315.0, 0.5),
        (343.0, 1.25),
    ],
    // Triangle right.
    &[(0.0, 1.25), (120.0, 1.25), (240.0, 1.25)],
    // Five-pointed star.
    &[
        (90.0, 1.35),
        (126.0, 0.55),
        (162.0, 1.35),
        (198.0, 0.55),
        (234.0, 1.35),
        (270.0, 0.55),
        (306.0, 1.35),
        (342.0, 0.55),
        (18.0, 1.35),
        (54.0, 0.55),
    ],
    // Flat bar.
    &[(20.0, 1.3), (160.0, 1.3), (200.0, 1.3), (340.0, 1.3)],
];

/// Estimates the width of a text in pixels, on the wide side: common sans-serif faces are narrower
/// than or as wide as DejaVu Sans, whose widths are taken here (from memory, rounded up).
pub(super) fn width(text: &str, size: f64) -> f64 {
    size * text.chars().map(advance).sum::<f64>()
}

fn advance(letter: char) -> f64 {
    match letter {
        'i' | 'j' | 'l' | '\'' => 0.29,
        ' ' | '.' | ',' | ':' | ';' | '|' | 'I' | 'J' => 0.35,
        'f' | 't' | 'r' | '(' | ')' | '[' | ']' | '-' | '/' => 0.42,
        'm' | 'M' | 'W' | '%' | '@' | '\u{2026}' => 1.02,
        'w' | '+' | '=' | '<' | '>' | '~' | '#' | 'G' | 'H' | 'N' | 'O' | 'Q' | 'D' | 'U' => 0.85,
        'c' | 's' | 'k' | 'v' | 'x' | 'y' | 'z' | '_' => 0.60,
        'a'..='z' | '0'..='9' => 0.65,
        'A'..='Z' => 0.72,
        letter if letter < '\u{80}' => 0.80,
        _ => 1.05,
    }
}

/// Returns a text fit for XML and for one line: characters that XML forbids, that turn the writing
/// direction, or that are for private use become blanks, and runs of blanks become one.
pub(super) fn clean(text: &str) -> String {
    let plain: String = text
        .chars()
        .map(|letter| match letter {
            '\u{202A}'..='\u{202E}' | '\u{2066}'..='\u{2069}' => ' ',
            '\u{E000}'..='\u{F8FF}' | '\u{FFFE}' | '\u{FFFF}' => ' ',
            letter if letter.is_control() => ' ',
            letter => letter,
        })
        .collect();
    plain.split_whitespace().collect::<Vec<_>>().join(" ")
}

/// Cuts the middle out of a text that is wider than `most` pixels, so that its two ends stay.
pub(super) fn cut(text: &str, size: f64, most: f64) -> String {
    if width(text, size) <= most {
        return text.to_owned();
    }
    let letters: Vec<char> = text.chars().collect();
    let mut kept = letters.len().saturating_sub(1);
    loop {
        let head: String = letters[..kept.div_ceil(2)].iter().collect();
        let tail: String = letters[letters.len() - kept / 2..].iter().collect();
        let short = format!("{}\u{2026}{}", head.trim_end(), tail.trim_start());
        if kept == 0 || width(&short, size) <= most {
            return short;
        }
        kept -= 1;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Relative luminance and contrast as WCAG 2.1 defines them (W3C Recommendation, 2018).
    fn luminance(RGBColor(red, green, blue): RGBColor) -> f64 {
        let linear = |channel: u8| {
            let share = f64::from(channel) / 255.0;
            if share <= 0.03928 { share / 12.92 } else { ((share + 0.055) / 1.055).powf(2.4) }
        };
        0.2126 * linear(red) + 0.7152 * linear(green) + 0.0722 * linear(blue)
    }

    #[test]
    fn colours_stand_out_from_the_paper() {
        for method in 0..24 {
            let contrast = 1.05 / (luminance(pen(method).colour) + 0.05);
            assert!(contrast >= 3.0, "method {method}: contrast {contrast}");
        }
    }

    #[test]
    fn every_method_has_its_own_pen() {
        let pens: Vec<Pen> = (0..24).map(pen).collect();
        for (at, one) in pens.iter().enumerate() {
            for other in &pens[..at] {
                assert_ne!(one.colour, other.colour);
                assert!((one.dash, one.shape) != (other.dash, other.shape));
            }
        }
        for (at, one) in pens[..12].iter().enumerate() {
            for other in &pens[..at] {
                assert!(one.dash != other.dash && one.shape != other.shape);
            }
        }
    }

    #[test]
    fn long_labels_lose_their_middle() {
        let long = "factored-alm+width=bound+starts=12+tolerance=1e-9";
        let short = cut(long, FONT, 200.0);
        assert!(short.starts_with("factored") && short.ends_with("1e-9"), "{short}");
        assert!(width(&short, FONT) <= 200.0);
        assert_eq!(cut("short", FONT, 200.0), "short");
    }

    #[test]
    fn hostile_characters_become_blanks() {
        assert_eq!(clean("a\u{0}b\n\u{202E}c\u{E000} d"), "a b c d");
    }
}
