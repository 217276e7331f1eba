//! Lettering: a plain sans-serif of our own, drawn as strokes with round ends at any size.
//!
//! A glyph is a few strokes on a grid of units: the baseline is y = 0, small letters reach 7, capitals and digits 10,
//! descenders -3. One unit is 0.072 of the size, so capitals of 15-pixel lettering are about 11 pixels high. Digits and signs
//! share one width, so that columns of numbers stand in line. At small sizes the heights are rounded to whole pixels,
//! which keeps the horizontal strokes sharp.

use super::colour::Rgb;
use super::picture::{Picture, Point};

/// A part of a glyph, in units.
enum Part {
    /// A line through points.
    Line(&'static [Point]),
    /// Cubic Bézier curves, end to end: 3 n + 1 points.
    Curve(&'static [Point]),
    /// An arc of an ellipse: centre, half-axes, from and to in degrees counter-clockwise from the right.
    Arc(f64, f64, f64, f64, f64, f64),
    /// A dot.
    Dot(f64, f64),
}
use Part::{Arc, Curve, Dot, Line};

/// A glyph: space before, width of the ink, space after, and what is drawn.
type Glyph = (f64, f64, f64, &'static [Part]);

/// How heavy the lettering is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Weight {
    /// Running text and numbers.
    Regular,
    /// Titles.
    Bold,
}

/// Units to pixels for a size of 1 pixel.
const UNIT: f64 = 0.072;
/// Space beside an upright stem, a round and a slope or an open side.
const STEM: f64 = 1.45;
const ROUND: f64 = 1.15;
const SLOPE: f64 = 0.72;
/// Width of the ink of every digit.
const DIGIT: f64 = 5.6;

/// The glyph of a character; an empty box for one that is not in the font.
#[rustfmt::skip]
fn glyph(c: char) -> Glyph {
    match c {
        ' ' | '\u{a0}' => (1.5, 0.7, 1.5, &[]),
        '0' => (ROUND, DIGIT, ROUND, &[Arc(2.8, 5.0, 2.7, 5.0, 0.0, 360.0)]),
        '1' => (ROUND, DIGIT, ROUND, &[Line(&[(1.0, 8.0), (3.4, 10.0), (3.4, 0.0)])]),
        '2' => (ROUND, DIGIT, ROUND, &[Arc(2.7, 7.3, 2.6, 2.7, 162.0, -36.0), Line(&[(4.8, 5.71), (0.1, 0.0), (5.5, 0.0)])]),
        '3' => (ROUND, DIGIT, ROUND, &[Arc(2.6, 7.6, 2.4, 2.4, 150.0, -90.0), Line(&[(1.7, 5.2), (2.6, 5.2)]), Arc(2.6, 2.6, 2.8, 2.6, 90.0, -150.0)]),
        '4' => (ROUND, DIGIT, ROUND, &[Line(&[(4.2, 0.0), (4.2, 10.0), (-0.1, 2.9), (5.8, 2.9)])]),
        '5' => (ROUND, DIGIT, ROUND, &[Line(&[(5.0, 10.0), (0.9, 10.0), (0.55, 5.3)]), Arc(2.6, 3.2, 2.9, 3.2, 138.0, -146.0)]),
        '6' => (ROUND, DIGIT, ROUND, &[Arc(2.8, 3.1, 2.75, 3.1, 0.0, 360.0), Arc(5.05, 3.1, 5.0, 6.9, 180.0, 98.0)]),
        '7' => (ROUND, DIGIT, ROUND, &[Line(&[(0.1, 10.0), (5.5, 10.0), (1.8, 0.0)])]),
        '8' => (ROUND, DIGIT, ROUND, &[Arc(2.8, 7.6, 2.35, 2.4, 0.0, 360.0), Arc(2.8, 2.6, 2.75, 2.6, 0.0, 360.0)]),
        '9' => (ROUND, DIGIT, ROUND, &[Arc(2.8, 6.9, 2.75, 3.1, 0.0, 360.0), Arc(0.55, 6.9, 5.0, 6.9, 0.0, -82.0)]),

        'A' => (SLOPE, 7.4, SLOPE, &[Line(&[(0.0, 0.0), (3.7, 10.0), (7.4, 0.0)]), Line(&[(1.22, 3.3), (6.18, 3.3)])]),
        'B' => (STEM, 5.9, ROUND, &[Line(&[(3.2, 0.0), (0.0, 0.0), (0.0, 10.0), (3.1, 10.0)]), Line(&[(0.0, 5.3), (3.2, 5.3)]), Arc(3.1, 7.65, 2.3, 2.35, 90.0, -90.0), Arc(3.2, 2.65, 2.7, 2.65, 90.0, -90.0)]),
        'C' => (ROUND, 6.9, SLOPE, &[Arc(4.2, 5.0, 4.2, 5.0, 48.0, 312.0)]),
        'D' => (STEM, 6.9, ROUND, &[Line(&[(2.6, 10.0), (0.0, 10.0), (0.0, 0.0), (2.6, 0.0)]), Arc(2.6, 5.0, 4.3, 5.0, 90.0, -90.0)]),
        'E' => (STEM, 5.3, SLOPE, &[Line(&[(5.3, 10.0), (0.0, 10.0), (0.0, 0.0), (5.3, 0.0)]), Line(&[(0.0, 5.2), (4.6, 5.2)])]),
        'F' => (STEM, 5.2, SLOPE, &[Line(&[(5.2, 10.0), (0.0, 10.0), (0.0, 0.0)]), Line(&[(0.0, 5.0), (4.4, 5.0)])]),
        'G' => (ROUND, 7.4, STEM, &[Arc(4.2, 5.0, 4.2, 5.0, 48.0, 320.0), Line(&[(7.42, 1.79), (7.42, 4.8), (4.5, 4.8)])]),
        'H' => (STEM, 6.8, STEM, &[Line(&[(0.0, 0.0), (0.0, 10.0)]), Line(&[(6.8, 0.0), (6.8, 10.0)]), Line(&[(0.0, 5.2), (6.8, 5.2)])]),
        'I' => (STEM, 0.0, STEM, &[Line(&[(0.0, 0.0), (0.0, 10.0)])]),
        'J' => (SLOPE, 4.0, STEM, &[Line(&[(4.0, 10.0), (4.0, 2.7)]), Arc(2.0, 2.7, 2.0, 2.7, 0.0, -160.0)]),
        'K' => (STEM, 6.1, SLOPE, &[Line(&[(0.0, 0.0), (0.0, 10.0)]), Line(&[(5.8, 10.0), (0.0, 3.9)]), Line(&[(2.2, 6.21), (6.1, 0.0)])]),
        'L' => (STEM, 5.0, SLOPE, &[Line(&[(0.0, 10.0), (0.0, 0.0), (5.0, 0.0)])]),
        'M' => (STEM, 8.2, STEM, &[Line(&[(0.0, 0.0), (0.0, 10.0), (4.1, 2.8), (8.2, 10.0), (8.2, 0.0)])]),
        'N' => (STEM, 6.8, STEM, &[Line(&[(0.0, 0.0), (0.0, 10.0), (6.8, 0.0), (6.8, 10.0)])]),
        'O' => (ROUND, 8.4, ROUND, &[Arc(4.2, 5.0, 4.2, 5.0, 0.0, 360.0)]),
        'P' => (STEM, 5.8, ROUND, &[Line(&[(0.0, 0.0), (0.0, 10.0), (3.1, 10.0)]), Line(&[(0.0, 4.6), (3.1, 4.6)]), Arc(3.1, 7.3, 2.7, 2.7, 90.0, -90.0)]),
        'Q' => (ROUND, 8.4, ROUND, &[Arc(4.2, 5.0, 4.2, 5.0, 0.0, 360.0), Line(&[(5.2, 2.4), (8.0, -0.8)])]),
        'R' => (STEM, 6.0, SLOPE, &[Line(&[(0.0, 0.0), (0.0, 10.0), (3.1, 10.0)]), Line(&[(0.0, 4.6), (3.1, 4.6)]), Arc(3.1, 7.3, 2.7, 2.7, 90.0, -90.0), Line(&[(2.9, 4.6), (6.0, 0.0)])]),
        'S' => (ROUND, 6.0, ROUND, &[Curve(&[(5.6, 8.3), (5.1, 9.4), (4.2, 10.0), (3.0, 10.0), (1.4, 10.0), (0.4, 9.0), (0.4, 7.6), (0.4, 5.9), (1.7, 5.5), (3.1, 5.1), (4.7, 4.65), (6.0, 4.2), (6.0, 2.5), (6.0, 1.0), (4.8, 0.0), (3.1, 0.0), (1.5, 0.0), (0.4, 0.7), (0.0, 1.9)])]),
        'T' => (SLOPE, 6.6, SLOPE, &[Line(&[(0.0, 10.0), (6.6, 10.0)]), Line(&[(3.3, 10.0), (3.3, 0.0)])]),
        'U' => (STEM, 6.6, STEM, &[Line(&[(0.0, 10.0), (0.0, 3.3)]), Arc(3.3, 3.3, 3.3, 3.3, 180.0, 360.0), Line(&[(6.6, 3.3), (6.6, 10.0)])]),
        'V' => (SLOPE, 7.2, SLOPE, &[Line(&[(0.0, 10.0), (3.6, 0.0), (7.2, 10.0)])]),
        'W' => (SLOPE, 10.4, SLOPE, &[Line(&[(0.0, 10.0), (2.6, 0.0), (5.2, 9.2), (7.8, 0.0), (10.4, 10.0)])]),
        'X' => (SLOPE, 6.4, SLOPE, &[Line(&[(0.2, 10.0), (6.4, 0.0)]), Line(&[(6.2, 10.0), (0.0, 0.0)])]),
        'Y' => (SLOPE, 6.8, SLOPE, &[Line(&[(0.0, 10.0), (3.4, 4.6), (6.8, 10.0)]), Line(&[(3.4, 4.6), (3.4, 0.0)])]),
        'Z' => (SLOPE, 6.3, SLOPE, &[Line(&[(0.2, 10.0), (6.1, 10.0), (0.0, 0.0), (6.3, 0.0)])]),

        'a' => (ROUND, 5.1, STEM, &[
            Curve(&[(0.5, 5.7), (0.9, 6.6), (1.7, 7.0), (2.7, 7.0), (4.4, 7.0), (5.1, 6.1), (5.1, 4.8)]), Line(&[(5.1, 4.8), (5.1, 0.0)]),
            Line(&[(5.1, 4.0), (3.0, 4.0)]), Curve(&[(3.0, 4.0), (1.2, 4.0), (0.0, 3.4), (0.0, 2.0), (0.0, 0.8), (0.9, 0.0), (2.2, 0.0), (3.9, 0.0), (5.1, 1.2), (5.1, 2.6)])]),
        'b' => (STEM, 5.8, ROUND, &[Line(&[(0.0, 10.0), (0.0, 0.0)]), Arc(2.9, 3.5, 2.9, 3.5, 0.0, 360.0)]),
        'c' => (ROUND, 5.0, SLOPE, &[Arc(3.0, 3.5, 3.0, 3.5, 48.0, 312.0)]),
        'd' => (ROUND, 5.8, STEM, &[Line(&[(5.8, 10.0), (5.8, 0.0)]), Arc(2.9, 3.5, 2.9, 3.5, 0.0, 360.0)]),
        'e' => (ROUND, 5.8, ROUND, &[Line(&[(0.0, 3.6), (5.8, 3.6)]), Arc(2.9, 3.5, 2.9, 3.5, 2.0, 318.0)]),
        'f' => (SLOPE, 3.8, 0.6, &[Line(&[(1.5, 0.0), (1.5, 7.9)]), Arc(3.5, 7.9, 2.0, 2.1, 180.0, 78.0), Line(&[(0.0, 7.0), (3.6, 7.0)])]),
        'g' => (ROUND, 5.8, STEM, &[Line(&[(5.8, 7.0), (5.8, -0.3)]), Arc(3.0, -0.3, 2.8, 2.7, 0.0, -150.0), Arc(2.9, 3.5, 2.9, 3.5, 0.0, 360.0)]),
        'h' => (STEM, 5.2, STEM, &[Line(&[(0.0, 10.0), (0.0, 0.0)]), Arc(2.6, 4.2, 2.6, 2.8, 180.0, 0.0), Line(&[(5.2, 4.2), (5.2, 0.0)])]),
        'i' => (STEM, 0.0, STEM, &[Line(&[(0.0, 7.0), (0.0, 0.0)]), Dot(0.0, 9.7)]),
        'j' => (0.1, 1.6, STEM, &[Line(&[(1.6, 7.0), (1.6, -1.0)]), Arc(0.0, -1.0, 1.6, 2.0, 0.0, -85.0), Dot(1.6, 9.7)]),
        'k' => (STEM, 5.0, SLOPE, &[Line(&[(0.0, 10.0), (0.0, 0.0)]), Line(&[(4.7, 7.0), (0.0, 2.7)]), Line(&[(1.7, 4.26), (5.0, 0.0)])]),
        'l' => (STEM, 1.5, 0.7, &[Line(&[(0.0, 10.0), (0.0, 1.6)]), Arc(1.6, 1.6, 1.6, 1.6, 180.0, 268.0)]),
        'm' => (STEM, 8.8, STEM, &[Line(&[(0.0, 7.0), (0.0, 0.0)]), Arc(2.2, 4.6, 2.2, 2.4, 180.0, 0.0), Line(&[(4.4, 4.6), (4.4, 0.0)]), Arc(6.6, 4.6, 2.2, 2.4, 180.0, 0.0), Line(&[(8.8, 4.6), (8.8, 0.0)])]),
        'n' => (STEM, 5.2, STEM, &[Line(&[(0.0, 7.0), (0.0, 0.0)]), Arc(2.6, 4.2, 2.6, 2.8, 180.0, 0.0), Line(&[(5.2, 4.2), (5.2, 0.0)])]),
        'o' => (ROUND, 6.0, ROUND, &[Arc(3.0, 3.5, 3.0, 3.5, 0.0, 360.0)]),
        'p' => (STEM, 5.8, ROUND, &[Line(&[(0.0, 7.0), (0.0, -3.0)]), Arc(2.9, 3.5, 2.9, 3.5, 0.0, 360.0)]),
        'q' => (ROUND, 5.8, STEM, &[Line(&[(5.8, 7.0), (5.8, -3.0)]), Arc(2.9, 3.5, 2.9, 3.5, 0.0, 360.0)]),
        'r' => (STEM, 3.2, 0.5, &[Line(&[(0.0, 7.0), (0.0, 0.0)]), Arc(2.5, 4.4, 2.5, 2.6, 180.0, 72.0)]),
        's' => (ROUND, 4.8, ROUND, &[Curve(&[(4.5, 5.8), (4.1, 6.6), (3.4, 7.0), (2.5, 7.0), (1.2, 7.0), (0.4, 6.3), (0.4, 5.3), (0.4, 4.1), (1.4, 3.85), (2.5, 3.6), (3.7, 3.3), (4.8, 3.0), (4.8, 1.8), (4.8, 0.7), (3.9, 0.0), (2.5, 0.0), (1.3, 0.0), (0.4, 0.5), (0.0, 1.3)])]),
        't' => (SLOPE, 3.5, SLOPE, &[Line(&[(1.4, 9.2), (1.4, 1.9)]), Arc(3.3, 1.9, 1.9, 1.9, 180.0, 275.0), Line(&[(0.0, 7.0), (3.4, 7.0)])]),
        'u' | 'µ' | 'μ' => (STEM, 5.2, STEM, if c == 'u' {
            &[Line(&[(0.0, 7.0), (0.0, 2.8)]), Arc(2.6, 2.8, 2.6, 2.8, 180.0, 360.0), Line(&[(5.2, 7.0), (5.2, 0.0)])]
        } else {
            &[Line(&[(0.0, 7.0), (0.0, -3.0)]), Arc(2.6, 2.8, 2.6, 2.8, 180.0, 360.0), Line(&[(5.2, 7.0), (5.2, 0.0)])]
        }),
        'v' => (SLOPE, 5.6, SLOPE, &[Line(&[(0.0, 7.0), (2.8, 0.0), (5.6, 7.0)])]),
        'w' => (SLOPE, 8.4, SLOPE, &[Line(&[(0.0, 7.0), (2.1, 0.0), (4.2, 6.4), (6.3, 0.0), (8.4, 7.0)])]),
        'x' => (SLOPE, 5.2, SLOPE, &[Line(&[(0.1, 7.0), (5.2, 0.0)]), Line(&[(5.1, 7.0), (0.0, 0.0)])]),
        'y' => (SLOPE, 5.6, SLOPE, &[Line(&[(0.0, 7.0), (2.8, 0.0)]), Line(&[(5.6, 7.0), (1.6, -3.0)])]),
        'z' => (SLOPE, 4.9, SLOPE, &[Line(&[(0.1, 7.0), (4.7, 7.0), (0.0, 0.0), (4.9, 0.0)])]),

        '.' => (STEM, 0.0, STEM, &[Dot(0.0, 0.2)]),
        ',' => (STEM, 0.0, STEM, &[Dot(0.0, 0.2), Line(&[(0.1, 0.1), (-0.5, -1.7)])]),
        ':' => (STEM, 0.0, STEM, &[Dot(0.0, 0.2), Dot(0.0, 5.6)]),
        ';' => (STEM, 0.0, STEM, &[Dot(0.0, 0.2), Line(&[(0.1, 0.1), (-0.5, -1.7)]), Dot(0.0, 5.6)]),
        '!' => (STEM, 0.0, STEM, &[Line(&[(0.0, 10.0), (0.0, 3.2)]), Dot(0.0, 0.2)]),
        '?' => (ROUND, 4.8, ROUND, &[Arc(2.4, 7.6, 2.3, 2.4, 165.0, -45.0), Line(&[(4.03, 5.9), (2.4, 4.2), (2.4, 3.0)]), Dot(2.4, 0.2)]),
        '·' => (STEM, 0.0, STEM, &[Dot(0.0, 4.4)]),
        '\'' | '’' => (STEM, 0.0, STEM, &[Line(&[(0.1, 10.2), (-0.2, 7.6)])]),
        '"' => (STEM, 1.9, STEM, &[Line(&[(0.0, 10.2), (0.0, 7.6)]), Line(&[(1.9, 10.2), (1.9, 7.6)])]),
        '-' => (ROUND, 3.0, ROUND, &[Line(&[(0.0, 3.7), (3.0, 3.7)])]),
        '–' => (ROUND, 5.0, ROUND, &[Line(&[(0.0, 3.7), (5.0, 3.7)])]),
        '−' => (ROUND, DIGIT, ROUND, &[Line(&[(0.2, 5.0), (5.4, 5.0)])]),
        '+' => (ROUND, DIGIT, ROUND, &[Line(&[(0.2, 5.0), (5.4, 5.0)]), Line(&[(2.8, 2.4), (2.8, 7.6)])]),
        '±' => (ROUND, DIGIT, ROUND, &[Line(&[(0.2, 5.8), (5.4, 5.8)]), Line(&[(2.8, 3.2), (2.8, 8.4)]), Line(&[(0.2, 0.9), (5.4, 0.9)])]),
        '×' => (ROUND, DIGIT, ROUND, &[Line(&[(0.7, 2.9), (4.9, 7.1)]), Line(&[(0.7, 7.1), (4.9, 2.9)])]),
        '=' => (ROUND, DIGIT, ROUND, &[Line(&[(0.2, 6.4), (5.4, 6.4)]), Line(&[(0.2, 3.6), (5.4, 3.6)])]),
        '<' => (ROUND, DIGIT, ROUND, &[Line(&[(5.2, 8.2), (0.4, 5.0), (5.2, 1.8)])]),
        '>' => (ROUND, DIGIT, ROUND, &[Line(&[(0.4, 8.2), (5.2, 5.0), (0.4, 1.8)])]),
        '(' => (ROUND, 1.9, SLOPE, &[Arc(3.2, 4.2, 3.2, 7.6, 117.0, 243.0)]),
        ')' => (SLOPE, 1.9, ROUND, &[Arc(-1.3, 4.2, 3.2, 7.6, 63.0, -63.0)]),
        '[' => (STEM, 1.9, SLOPE, &[Line(&[(1.9, 11.0), (0.0, 11.0), (0.0, -2.4), (1.9, -2.4)])]),
        ']' => (SLOPE, 1.9, STEM, &[Line(&[(0.0, 11.0), (1.9, 11.0), (1.9, -2.4), (0.0, -2.4)])]),
        '/' => (SLOPE, 4.4, SLOPE, &[Line(&[(0.0, -1.4), (4.4, 10.9)])]),
        '_' => (0.2, 5.6, 0.2, &[Line(&[(0.0, -1.6), (5.6, -1.6)])]),
        '%' => (ROUND, 8.6, ROUND, &[Arc(1.9, 7.6, 1.9, 2.4, 0.0, 360.0), Arc(6.7, 2.4, 1.9, 2.4, 0.0, 360.0), Line(&[(7.2, 10.0), (1.4, 0.0)])]),
        '°' => (ROUND, 3.0, ROUND, &[Arc(1.5, 8.5, 1.5, 1.5, 0.0, 360.0)]),
        'σ' => (ROUND, 6.2, SLOPE, &[Arc(2.9, 3.4, 2.9, 3.4, 0.0, 360.0), Line(&[(2.9, 6.8), (6.2, 6.8)])]),
        'Δ' => (SLOPE, 7.6, SLOPE, &[Line(&[(0.0, 0.0), (3.8, 10.0), (7.6, 0.0), (0.0, 0.0)])]),
        _ => (STEM, 4.6, STEM, &[Line(&[(0.0, 0.0), (0.0, 10.0), (4.6, 10.0), (4.6, 0.0), (0.0, 0.0)])]),
    }
}

/// A superscript digit stands on the shoulder of the line: the digit, or `None`.
fn raised(c: char) -> Option<char> {
    match c {
        '¹' => Some('1'),
        '²' => Some('2'),
        '³' => Some('3'),
        '⁻' => Some('−'),
        _ => None,
    }
}

/// Size and rise of superscripts, in shares of the size and in units.
const RAISED_SIZE: f64 = 0.6;
const RAISED_BY: f64 = 4.6;

/// Width of a line of text in pixels, at a size in pixels.
pub fn text_width(text: &str, size: f64) -> f64 {
    text.chars().map(|c| advance(c, size)).sum()
}

/// Pixels from one character to the next.
fn advance(c: char, size: f64) -> f64 {
    let (share, c) = raised(c).map_or((1.0, c), |digit| (RAISED_SIZE, digit));
    let (before, ink, after, _) = glyph(c);
    (before + ink + after) * UNIT * size * share
}

/// Height of capitals and digits in pixels, stroke included.
pub fn cap_height(size: f64) -> f64 {
    (10.0 * UNIT * size).round() + stroke_width(size, Weight::Regular)
}

fn stroke_width(size: f64, weight: Weight) -> f64 {
    match weight {
        Weight::Regular => (0.086 * size).max(1.0),
        Weight::Bold => (0.122 * size).max(1.4),
    }
}

/// Draws a line of text; `left` is where it begins and `baseline` where the letters stand, in pixels. A character that
/// is not in the font is drawn as an empty box.
pub fn draw_text(
    picture: &mut Picture,
    (left, baseline): Point,
    text: &str,
    size: f64,
    weight: Weight,
    colour: Rgb,
) {
    let width = stroke_width(size, weight);
    let unit = UNIT * size;
    // Small letters and capitals end on whole pixels above the baseline's own row.
    let (small, capital) = ((7.0 * unit).round(), (10.0 * unit).round());
    let rise = |y: f64| match y {
        y if y <= 0.0 => y * unit,
        y if y <= 7.0 => y / 7.0 * small,
        y => small + (y - 7.0) / 3.0 * (capital - small),
    };
    // The stroke's lower edge stands on the baseline; its middle falls on the middle of a row.
    let floor = baseline.round() - 0.5 - ((width - 1.0) * 0.5).round();
    let mut pen = left;
    for c in text.chars() {
        let (share, lift, body) =
            raised(c).map_or((1.0, 0.0, c), |digit| (RAISED_SIZE, RAISED_BY * unit, digit));
        let (before, _, _, parts) = glyph(body);
        let place = |(x, y): Point| {
            // A stem at the left of a glyph falls on the middle of a column.
            let stem = (pen + before * unit * share - 0.5).round() + 0.5;
            let up = if share < 1.0 { lift + y * unit * share } else { rise(y) };
            (stem + x * unit * share, floor - up)
        };
        let lines: Vec<Vec<Point>> =
            parts.iter().filter_map(flatten).map(|path| path.into_iter().map(place).collect()).collect();
        picture.stroke(&lines, if share < 1.0 { width * 0.85 } else { width }, colour);
        let dots: Vec<Vec<Point>> = parts
            .iter()
            .filter_map(|part| if let Dot(x, y) = part { Some(vec![place((*x, *y))]) } else { None })
            .collect();
        picture.stroke(&dots, 1.4 * width, colour);
        pen += advance(c, size);
    }
}

/// A part as a line through points, in units; `None` for a dot.
fn flatten(part: &Part) -> Option<Vec<Point>> {
    match *part {
        Line(points) => Some(points.to_vec()),
        Arc(cx, cy, rx, ry, from, to) => {
            let steps = ((to - from).abs() / 9.0).ceil().max(1.0);
            let at = |i: usize| {
                let (sin, cos) = (from + (to - from) * i as f64 / steps).to_radians().sin_cos();
                (cx + rx * cos, cy + ry * sin)
            };
            Some((0..=steps as usize).map(at).collect())
        }
        Curve(points) => {
            let mut path = Vec::new();
            for piece in points.windows(4).step_by(3) {
                for i in 0..=8 {
                    let t = f64::from(i) / 8.0;
                    let s = 1.0 - t;
                    let weights = [s * s * s, 3.0 * s * s * t, 3.0 * s * t * t, t * t * t];
                    let sum = |coordinate: fn(&Point) -> f64| -> f64 {
                        piece.iter().zip(weights).map(|(p, w)| coordinate(p) * w).sum()
                    };
                    path.push((sum(|p| p.0), sum(|p| p.1)));
                }
            }
            Some(path)
        }
        Dot(..) => None,
    }
}

/// Breaks a text into lines no wider than `width` pixels, at spaces; a word that is wider stands alone.
pub fn wrap(text: &str, size: f64, width: f64) -> Vec<String> {
    let mut lines: Vec<String> = Vec::new();
    for word in text.split_whitespace() {
        match lines.last_mut() {
            Some(line) if text_width(line, size) + text_width(&format!(" {word}"), size) <= width => {
                line.push(' ');
                line.push_str(word);
            }
            _ => lines.push(word.to_owned()),
        }
    }
    lines
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::colour::Oklab;

    const ALL: &str =
        "0123456789ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz.,:;!?·'\"-–−+±×=<>()[]/_%°µσΔ²³";

    fn drawn(text: &str, size: f64) -> Picture {
        let mut picture = Picture::new(60, 40, Oklab { l: 1.0, a: 0.0, b: 0.0 }).unwrap();
        draw_text(&mut picture, (10.0, 28.0), text, size, Weight::Regular, [0, 0, 0]);
        picture
    }

    #[test]
    fn every_character_has_its_own_shape() {
        let shapes: Vec<Picture> = ALL.chars().map(|c| drawn(&c.to_string(), 14.0)).collect();
        let unknown = drawn("\u{2603}", 14.0);
        for (i, shape) in shapes.iter().enumerate() {
            let dark = shape.rgb.iter().any(|&v| v < 120);
            assert!(dark && *shape != unknown, "{:?}", ALL.chars().nth(i));
            for j in 0..i {
                let apart: f64 = shape
                    .rgb
                    .iter()
                    .zip(&shapes[j].rgb)
                    .step_by(3)
                    .map(|(a, b)| (f64::from(*a) - f64::from(*b)).abs() / 255.0)
                    .sum();
                assert!(apart > 1.5, "{:?} and {:?}: {apart}", ALL.chars().nth(i), ALL.chars().nth(j));
            }
        }
    }

    // The hook of j reaches under the letter before it, the flag of f over the one after it; low lines join.
    #[test]
    fn the_ink_lies_within_the_advance_and_on_the_line() {
        for c in ALL.chars().filter(|c| !"fj_".contains(*c)) {
            for size in [14.0, 20.0] {
                let picture = drawn(&c.to_string(), size);
                let end = 10.0 + text_width(&c.to_string(), size);
                for (at, v) in picture.rgb.iter().step_by(3).enumerate() {
                    let (row, column) = (at / 60, at % 60);
                    if *v < 200 {
                        let inside = column as f64 >= 9.0 && (column as f64) <= end;
                        let lined =
                            row < 28 + (0.28 * size) as usize && row + 1 >= 28 - (0.95 * size) as usize;
                        assert!(inside && lined, "{c} at {size}: row {row}, column {column}");
                    }
                }
            }
        }
    }

    #[test]
    fn numbers_stand_in_line_and_widths_add() {
        for text in ["−0.40", "+1.25", "±8.88"] {
            assert!((text_width(text, 15.0) - text_width("+0.00", 15.0)).abs() < 1e-9, "{text}");
        }
        let whole = text_width("ab (µm²)", 17.0);
        assert!((whole - text_width("ab ", 17.0) - text_width("(µm²)", 17.0)).abs() < 1e-9);
        assert!((text_width("abc", 30.0) - 2.0 * text_width("abc", 15.0)).abs() < 1e-9);
        assert!(text_width("²", 15.0) < 0.7 * text_width("2", 15.0));
    }

    #[test]
    fn lines_break_at_spaces_and_lose_nothing() {
        let text = "one two  three incomprehensibilities four";
        let lines = wrap(text, 14.0, 90.0);
        assert_eq!(lines.join(" "), "one two three incomprehensibilities four");
        assert!(lines.len() > 2 && lines.contains(&"incomprehensibilities".to_owned()));
        for line in lines.iter().filter(|l| l.contains(' ')) {
            assert!(text_width(line, 14.0) <= 90.0);
        }
        assert!(wrap("  ", 14.0, 90.0).is_empty());
    }
}
