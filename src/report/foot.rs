//! What stands at the foot of a sheet: scale bar, north arrow, the entry for missing pixels.

use super::maps::MapOptions;
use super::palette::{MISSING_GROUND, MISSING_HATCH};
use super::picture::Picture;
use super::sheet::INK;
use super::text::{Weight, cap_height, draw_text, text_width};

/// An entry at the foot of the sheet.
pub(super) enum FootKind {
    ScaleBar { pixels: f64, text: String },
    North(f64),
    Missing,
}

/// An entry and its place.
pub(super) struct FootItem {
    pub(super) kind: FootKind,
    pub(super) left: f64,
    pub(super) base: f64,
    pub(super) line: usize,
}

const NO_DATA: &str = "no data";

impl FootKind {
    /// Width in picture pixels.
    pub(super) fn width(&self, size: f64) -> f64 {
        match self {
            FootKind::ScaleBar { pixels, text } => pixels + 0.6 * size + text_width(text, size),
            FootKind::North(_) => 2.3 * size,
            FootKind::Missing => 2.6 * size + text_width(NO_DATA, size),
        }
    }
}

impl FootItem {
    /// Draws it.
    pub(super) fn draw(&self, picture: &mut Picture, options: &MapOptions) {
        let (size, left, base) = (options.text_size, self.left, self.base);
        let cap = cap_height(size);
        match &self.kind {
            FootKind::ScaleBar { pixels, text } => {
                let (l, r, y) = (left + 0.5, left + 0.5 + pixels.round(), base - 0.5);
                let end = 0.45 * size;
                picture.stroke(
                    &[vec![(l, y - end), (l, y), (r, y), (r, y - end)]],
                    (0.1 * size).max(1.0),
                    INK,
                );
                let middle = 0.5 * (l + r);
                picture.stroke(&[vec![(middle, y - 0.6 * end), (middle, y)]], 1.0, INK);
                draw_text(picture, (r + 0.6 * size, base), text, size, Weight::Regular, INK);
            }
            FootKind::North(degrees) => {
                let (sin, cos) = degrees.to_radians().sin_cos();
                let (x, y) = (left + 0.6 * size, base - 0.5 * cap);
                let at = |along: f64, side: f64| (x + along * sin + side * cos, y - along * cos + side * sin);
                let (long, wide) = (0.75 * size, 0.33 * size);
                picture.polygon(&[at(long, 0.0), at(-long, -wide), at(-0.6 * long, 0.0)], INK);
                picture.stroke(
                    &[vec![
                        at(long, 0.0),
                        at(-long, -wide),
                        at(-0.6 * long, 0.0),
                        at(-long, wide),
                        at(long, 0.0),
                    ]],
                    1.0,
                    INK,
                );
                draw_text(picture, (left + 1.4 * size, base), "N", size, Weight::Regular, INK);
            }
            FootKind::Missing => {
                let (width, height) = ((1.9 * size).round() as usize, cap.round() as usize);
                let (column, row) = (left as usize, (base - cap).round() as usize);
                hatch(picture, column, row, width, height, (column, row));
                picture.frame(column, row, width, height, INK);
                draw_text(picture, (left + 2.6 * size, base), NO_DATA, size, Weight::Regular, INK);
            }
        }
    }
}

/// Fills a rectangle with the hatch of missing pixels, which runs on across rectangles of one `origin`.
pub(super) fn hatch(
    picture: &mut Picture,
    left: usize,
    top: usize,
    width: usize,
    height: usize,
    origin: (usize, usize),
) {
    const PERIOD: f64 = 7.0;
    let (ground, line) = (MISSING_GROUND.to_rgb(), MISSING_HATCH.to_rgb());
    for row in top..top + height {
        for column in left..left + width {
            // Distance from the nearest diagonal, across it.
            let along = (column - origin.0) as f64 + (row - origin.1) as f64;
            let off =
                (along / PERIOD - (along / PERIOD).round()).abs() * PERIOD * std::f64::consts::FRAC_1_SQRT_2;
            picture.fill(column, row, 1, 1, ground);
            picture.blend(column as i64, row as i64, line, 1.1 - off);
        }
    }
}
