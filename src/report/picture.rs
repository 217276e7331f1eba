//! A picture in memory: filled and stroked with anti-aliasing, written as PNG.

use super::colour::{Oklab, Rgb};
use super::ledger::write_whole;
use crate::error::{Error, Result};
use crate::raster::check_free;
use image::ImageEncoder;
use image::codecs::png::{CompressionType, FilterType, PngEncoder};
use std::path::Path;

/// The longest side a picture may have, in pixels.
pub const MAX_SIDE: usize = 16_384;

/// A point on a picture, in pixels: (across, down); the upper left corner of the picture is (0, 0), the centre of its
/// first pixel (0.5, 0.5).
pub type Point = (f64, f64);

/// An sRGB picture, 8 bits a channel.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Picture {
    /// Pixels across.
    pub width: usize,
    /// Pixels down.
    pub height: usize,
    /// Red, green, blue of each pixel, row by row from the top: `width * height * 3` bytes.
    pub rgb: Vec<u8>,
}

impl Picture {
    /// A picture of one colour.
    ///
    /// # Errors
    /// When a side is 0 or longer than [`MAX_SIDE`].
    pub fn new(width: usize, height: usize, ground: Oklab) -> Result<Self> {
        if width == 0 || height == 0 || width > MAX_SIDE || height > MAX_SIDE {
            return Err(Error::usage(
                format!("a picture of {width} x {height} pixels cannot be drawn"),
                format!("each side must be 1 to {MAX_SIDE} pixels"),
            ));
        }
        let rgb = ground.to_rgb().iter().copied().cycle().take(width * height * 3).collect();
        Ok(Picture { width, height, rgb })
    }

    /// Lays `colour` over a pixel; `cover` is 0 (nothing) to 1 (all). Outside the picture nothing happens.
    pub fn blend(&mut self, column: i64, row: i64, colour: Rgb, cover: f64) {
        let (Ok(column), Ok(row)) = (usize::try_from(column), usize::try_from(row)) else { return };
        if column >= self.width || row >= self.height {
            return;
        }
        let at = (row * self.width + column) * 3;
        let cover = cover.clamp(0.0, 1.0);
        for (held, new) in self.rgb[at..at + 3].iter_mut().zip(colour) {
            let mixed = f64::from(*held) * (1.0 - cover) + f64::from(new) * cover;
            *held = mixed.round() as u8;
        }
    }

    /// Fills whole pixels: a rectangle with its upper left corner at (`column`, `row`).
    pub fn fill(&mut self, column: usize, row: usize, width: usize, height: usize, colour: Rgb) {
        let right = column.saturating_add(width).min(self.width);
        for r in row..row.saturating_add(height).min(self.height) {
            for c in column..right {
                self.blend(c as i64, r as i64, colour, 1.0);
            }
        }
    }

    /// A frame of one pixel just outside the rectangle.
    pub fn frame(&mut self, column: usize, row: usize, width: usize, height: usize, colour: Rgb) {
        let (left, top) = (column.saturating_sub(1), row.saturating_sub(1));
        self.fill(left, top, width + 2, 1, colour);
        self.fill(left, row + height, width + 2, 1, colour);
        self.fill(left, top, 1, height + 2, colour);
        self.fill(column + width, top, 1, height + 2, colour);
    }

    /// Draws lines of `width` pixels with round ends and joins. All paths together are one shape: where they cross,
    /// nothing gets darker. A path of one point is a disc.
    pub fn stroke(&mut self, paths: &[Vec<Point>], width: f64, colour: Rgb) {
        let segments: Vec<(Point, Point)> = paths
            .iter()
            .flat_map(|path| {
                let dot = (path.len() == 1).then(|| (path[0], path[0]));
                path.windows(2).map(|pair| (pair[0], pair[1])).chain(dot)
            })
            .collect();
        let half = 0.5 * width;
        let spread = half + 1.0;
        let (Some((left, right)), Some((top, bottom))) = (
            span(segments.iter().flat_map(|s| [s.0.0, s.1.0]), spread, self.width),
            span(segments.iter().flat_map(|s| [s.0.1, s.1.1]), spread, self.height),
        ) else {
            return;
        };
        for row in top..bottom {
            for column in left..right {
                let centre = (column as f64 + 0.5, row as f64 + 0.5);
                let near = segments.iter().map(|s| distance(centre, *s)).fold(f64::INFINITY, f64::min);
                let cover = half + 0.5 - near;
                if cover > 0.0 {
                    // A line thinner than a pixel is fainter, never darker than its width allows.
                    self.blend(column as i64, row as i64, colour, cover.min(1.0) * width.min(1.0));
                }
            }
        }
    }

    /// Fills a convex or concave polygon, with 4 x 4 samples a pixel at its edge.
    pub fn polygon(&mut self, corners: &[Point], colour: Rgb) {
        let (Some((left, right)), Some((top, bottom))) = (
            span(corners.iter().map(|p| p.0), 0.0, self.width),
            span(corners.iter().map(|p| p.1), 0.0, self.height),
        ) else {
            return;
        };
        for row in top..bottom {
            for column in left..right {
                let inside = (0..16)
                    .filter(|i| {
                        let (dx, dy) = (f64::from(i % 4), f64::from(i / 4));
                        let at = (column as f64 + (dx + 0.5) / 4.0, row as f64 + (dy + 0.5) / 4.0);
                        is_inside(corners, at)
                    })
                    .count();
                self.blend(column as i64, row as i64, colour, inside as f64 / 16.0);
            }
        }
    }

    /// The picture as the bytes of a PNG file.
    ///
    /// # Errors
    /// When the fields contradict each other.
    pub fn to_png(&self) -> Result<Vec<u8>> {
        let bad = |problem: String| Error::usage(format!("picture: {problem}"), "");
        let side = |n: usize| u32::try_from(n).map_err(|_| bad(format!("{n} pixels on a side")));
        let (width, height) = (side(self.width)?, side(self.height)?);
        let wanted = self.width.checked_mul(self.height).and_then(|n| n.checked_mul(3));
        if wanted != Some(self.rgb.len()) {
            return Err(bad(format!(
                "{} bytes do not make {} x {} pixels of 3 bytes",
                self.rgb.len(),
                self.width,
                self.height
            )));
        }
        let mut bytes = Vec::new();
        PngEncoder::new_with_quality(&mut bytes, CompressionType::Best, FilterType::Adaptive)
            .write_image(&self.rgb, width, height, image::ExtendedColorType::Rgb8)
            .map_err(|e| bad(e.to_string()))?;
        Ok(bytes)
    }

    /// Writes a PNG file: beside its name first, synced, then renamed, so that nothing half-written ever has the name.
    ///
    /// # Errors
    /// When `path` exists and `overwrite` is false, its folder is missing, or the disk refuses; nothing is left then.
    pub fn write_png(&self, path: &Path, overwrite: bool) -> Result<()> {
        check_free(path, overwrite)?;
        write_whole(path, &self.to_png()?).map_err(|e| Error::io(path, "writing the picture", e))
    }
}

/// The whole pixels that coordinates with `spread` about them touch, within 0 to `limit`; `None` if there are none.
fn span(values: impl Iterator<Item = f64>, spread: f64, limit: usize) -> Option<(usize, usize)> {
    let (mut low, mut high) = (f64::INFINITY, f64::NEG_INFINITY);
    for v in values {
        if !v.is_finite() {
            return None;
        }
        (low, high) = (low.min(v), high.max(v));
    }
    // The casts saturate: below 0 becomes 0.
    let first = (low - spread).floor().max(0.0) as usize;
    let end = ((high + spread).ceil().max(0.0) as usize).min(limit);
    (first < end).then_some((first, end))
}

/// Distance from `p` to a segment.
fn distance(p: Point, (a, b): (Point, Point)) -> f64 {
    let (ux, uy) = (b.0 - a.0, b.1 - a.1);
    let (vx, vy) = (p.0 - a.0, p.1 - a.1);
    let length_sq = ux * ux + uy * uy;
    let t = if length_sq > 0.0 { ((vx * ux + vy * uy) / length_sq).clamp(0.0, 1.0) } else { 0.0 };
    (vx - t * ux).hypot(vy - t * uy)
}

/// Even-odd rule.
fn is_inside(corners: &[Point], p: Point) -> bool {
    let mut inside = false;
    let mut before = corners.len().wrapping_sub(1);
    for i in 0..corners.len() {
        let (a, b) = (corners[i], corners[before]);
        if (a.1 > p.1) != (b.1 > p.1) && p.0 < (b.0 - a.0) * (p.1 - a.1) / (b.1 - a.1) + a.0 {
            inside = !inside;
        }
        before = i;
    }
    inside
}

#[cfg(test)]
mod tests {
    use super::*;

    const WHITE: Oklab = Oklab { l: 1.0, a: 0.0, b: 0.0 };

    fn ink(picture: &Picture) -> f64 {
        picture.rgb.iter().step_by(3).map(|&v| 1.0 - f64::from(v) / 255.0).sum()
    }

    #[test]
    fn a_stroke_covers_its_area() {
        // Area of a line with round ends: length x width + pi (width / 2)^2.
        for (x, y, dx, dy, width) in [(11.3, 9.7, 23.0, 0.0, 3.0), (8.2, 12.4, 14.0, 21.0, 2.4)] {
            let mut picture = Picture::new(47, 53, WHITE).unwrap();
            picture.stroke(&[vec![(x, y), (x + dx, y + dy)]], width, [0, 0, 0]);
            let area = f64::hypot(dx, dy) * width + std::f64::consts::PI * width * width / 4.0;
            assert!((ink(&picture) - area).abs() < 0.03 * area, "{} for {area}", ink(&picture));
        }
    }

    #[test]
    fn crossing_paths_do_not_add() {
        let cross = vec![vec![(3.0, 10.0), (17.0, 10.0)], vec![(3.0, 10.0), (17.0, 10.0)]];
        let (mut once, mut twice) =
            (Picture::new(21, 20, WHITE).unwrap(), Picture::new(21, 20, WHITE).unwrap());
        once.stroke(&cross[..1], 1.3, [0, 0, 0]);
        twice.stroke(&cross, 1.3, [0, 0, 0]);
        assert_eq!(once, twice);
    }

    #[test]
    fn a_polygon_covers_its_area_and_stays_in_the_picture() {
        let mut picture = Picture::new(31, 29, WHITE).unwrap();
        picture.polygon(&[(4.0, 5.0), (24.0, 5.0), (4.0, 20.0)], [0, 0, 0]);
        assert!((ink(&picture) - 150.0).abs() < 2.0, "{}", ink(&picture));
        picture.polygon(&[(-9.0, -9.0), (90.0, -9.0), (90.0, 90.0), (-9.0, 90.0)], [0, 0, 0]);
        assert!((ink(&picture) - 31.0 * 29.0).abs() < 1e-9);
        picture.polygon(&[], [0, 0, 0]);
        picture.stroke(&[vec![(f64::NAN, 0.0), (1.0, 1.0)]], 1.0, [9, 9, 9]);
        assert!((ink(&picture) - 31.0 * 29.0).abs() < 1e-9);
    }

    #[test]
    fn png_comes_back_as_it_was_and_nothing_stays_beside() {
        let mut picture = Picture::new(7, 5, WHITE).unwrap();
        picture.fill(1, 2, 4, 2, [200, 30, 90]);
        picture.frame(2, 2, 3, 2, [1, 2, 3]);
        let folder = std::env::temp_dir().join(format!("regauge-picture-{}", std::process::id()));
        std::fs::create_dir_all(&folder).unwrap();
        let path = folder.join("a.png");
        picture.write_png(&path, false).unwrap();
        let back = image::load_from_memory(&std::fs::read(&path).unwrap()).unwrap().to_rgb8();
        assert_eq!((back.width(), back.height()), (7, 5));
        assert_eq!(back.into_raw(), picture.rgb);
        assert_eq!(picture.write_png(&path, false).unwrap_err().exit_code(), 2);
        picture.write_png(&path, true).unwrap();
        let missing = folder.join("nowhere").join("a.png");
        assert_eq!(picture.write_png(&missing, false).unwrap_err().exit_code(), 1);
        // A folder under the name cannot be replaced; the part beside it must go.
        std::fs::create_dir(folder.join("b.png")).unwrap();
        assert!(picture.write_png(&folder.join("b.png"), true).is_err());
        let mut names: Vec<_> = std::fs::read_dir(&folder).unwrap().map(|e| e.unwrap().file_name()).collect();
        names.sort();
        assert_eq!(names, ["a.png", "b.png"]);
        std::fs::remove_dir_all(&folder).unwrap();
    }

    #[test]
    fn bad_sizes_are_refused() {
        assert!(Picture::new(0, 4, WHITE).is_err());
        assert!(Picture::new(4, MAX_SIDE + 1, WHITE).is_err());
        assert!(Picture { width: 3, height: 3, rgb: vec![0; 26] }.to_png().is_err());
    }
}
