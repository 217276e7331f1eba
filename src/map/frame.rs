//! Frames: which grid a moved or rescaled raster gets.

use super::Map;
use crate::error::{Error, Result};
use crate::grid::{Grid, round_size};
use serde::{Deserialize, Serialize};

/// What a rescaling leaves in place.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Anchor {
    /// The outer edges: input position = (out + 0.5) * step - 0.5.
    #[default]
    Edge,
    /// The centre of the first pixel: input position = out * step. For elevation postings.
    Centre,
}

/// How a rescaling is asked for, rows first.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Rescale {
    /// Output pixels per input pixel.
    Factor(f64, f64),
    /// Height and width of a pixel in world units.
    Pixel(f64, f64),
    /// Rows and columns.
    Size(usize, usize),
}

/// The grid of a rescaled raster and the way back to its input.
///
/// # Errors
/// When the factor, pixel or size is not possible.
pub fn rescaled(grid: &Grid, how: Rescale, anchor: Anchor) -> Result<(Grid, Map)> {
    let positive = |v: (f64, f64), what: &str| {
        let fine = v.0 > 0.0 && v.1 > 0.0 && v.0.is_finite() && v.1.is_finite();
        fine.then_some(v).ok_or_else(|| {
            Error::usage(format!("{what} must be positive"), "such as 0.5, or 0.5,2 for rows and columns")
        })
    };
    let axis = |n: usize, step: f64| -> usize {
        match anchor {
            Anchor::Edge => round_size(n as f64 / step),
            // Postings cover the length between the first and the last of them.
            Anchor::Centre => round_size((n as f64 - 1.0) / step + 1.0),
        }
    };
    let (step, size) = match how {
        Rescale::Factor(r, c) => {
            let f = positive((r, c), "the factor")?;
            let step = (1.0 / f.0, 1.0 / f.1);
            (step, (axis(grid.rows, step.0), axis(grid.columns, step.1)))
        }
        Rescale::Pixel(h, w) => {
            let p = positive((h, w), "the pixel size")?;
            let own = grid.pixel_size();
            let step = (p.0 / own.0, p.1 / own.1);
            (step, (axis(grid.rows, step.0), axis(grid.columns, step.1)))
        }
        Rescale::Size(rows, columns) => {
            if rows == 0 || columns == 0 {
                return Err(Error::usage("the size must be at least 1x1", "such as --size 600x800"));
            }
            let step = |n: usize, m: usize| match anchor {
                Anchor::Edge => n as f64 / m as f64,
                Anchor::Centre if m == 1 || n == 1 => 1.0,
                Anchor::Centre => (n as f64 - 1.0) / (m as f64 - 1.0),
            };
            ((step(grid.rows, rows), step(grid.columns, columns)), (rows, columns))
        }
    };
    let offset = |step: f64| match anchor {
        Anchor::Edge => 0.5 * (step - 1.0),
        Anchor::Centre => 0.0,
    };
    let origin = (offset(step.0), offset(step.1));
    let target = grid.stepped(size.0, size.1, step, origin);
    target.check()?;
    Ok((target, Map::axes((step.0, origin.0), (step.1, origin.1))))
}

/// Which frame a moved raster gets.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Frame {
    /// The input's.
    #[default]
    Keep,
    /// The input's lattice grown by whole pixels so that nothing is cut off; for quarter turns and mirrors the image of
    /// the input's frame.
    Fit,
}

/// The grid of a moved raster and the way back. `motion` takes input to output positions on the input's own grid.
///
/// # Errors
/// When the motion has no inverse or the frame would be absurd.
pub fn moved(grid: &Grid, motion: &Map, frame: Frame) -> Result<(Grid, Map)> {
    let back = motion.invert()?;
    if frame == Frame::Keep {
        return Ok((grid.clone(), back));
    }
    let ahead = motion.checked(grid.rows, grid.columns)?;
    let b = ahead.bounds((-0.5, grid.rows as f64 - 0.5), (-0.5, grid.columns as f64 - 0.5));
    const SLACK: f64 = 1e-6;
    // A plain shift is no turn: it grows the lattice like any other motion.
    let exact = motion.as_axes().is_some_and(|a| {
        a.rows.0.abs() == 1.0 && a.columns.0.abs() == 1.0 && (a.swapped || a.rows.0 + a.columns.0 < 2.0)
    });
    let (low, high) = if exact {
        ((b.rows.0 + 0.5, b.columns.0 + 0.5), (b.rows.1 + 0.5, b.columns.1 + 0.5))
    } else {
        let down = |v: f64| (v + 0.5 + SLACK).floor();
        let up = |v: f64| (v + 0.5 - SLACK).ceil();
        ((down(b.rows.0), down(b.columns.0)), (up(b.rows.1), up(b.columns.1)))
    };
    let (rows, columns) = ((high.0 - low.0).round(), (high.1 - low.1).round());
    if !(rows >= 1.0 && columns >= 1.0 && rows < 1e12 && columns < 1e12) {
        return Err(Error::unfit(
            format!("the fitted frame would have {rows} x {columns} pixels"),
            "check the map, or use --frame keep",
        ));
    }
    let target = grid.stepped(rows as usize, columns as usize, (1.0, 1.0), low);
    target.check()?;
    Ok((target, Map::shift(low.0, low.1).then(&back)))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::map::Motion;

    #[test]
    fn a_fitted_quarter_turn_is_the_transposed_frame_and_a_whole_pixel_map() {
        for (rows, columns) in [(5, 8), (6, 8), (1, 3)] {
            let motion = Motion { turn: 90.0, ..Motion::about_centre(rows, columns) }.map().unwrap();
            let (grid, back) = moved(&Grid::new(rows, columns), &motion, Frame::Fit).unwrap();
            assert_eq!((grid.rows, grid.columns), (columns, rows));
            // Counter-clockwise: the last column becomes the first row.
            assert_eq!(back.apply(0.0, 0.0), (0.0, columns as f64 - 1.0));
        }
    }

    #[test]
    fn fit_grows_by_whole_pixels_and_loses_no_corner() {
        let motion = Motion { turn: 30.0, ..Motion::about_centre(20, 31) }.map().unwrap();
        let (grid, back) = moved(&Grid::new(20, 31), &motion, Frame::Fit).unwrap();
        let ahead = back.invert().unwrap();
        let b = ahead.bounds((-0.5, 19.5), (-0.5, 30.5));
        assert!(b.rows.0 >= -0.5 - 1e-9 && b.rows.1 <= grid.rows as f64 - 0.5 + 1e-9, "{b:?}");
        assert!(b.columns.0 >= -0.5 - 1e-9 && b.columns.1 <= grid.columns as f64 - 0.5 + 1e-9);
        let kept = motion.invert().unwrap();
        let (r, c) = (back.matrix[0][2] - kept.matrix[0][2], back.matrix[1][2] - kept.matrix[1][2]);
        let there = (
            motion.matrix[0][0] * r + motion.matrix[0][1] * c,
            motion.matrix[1][0] * r + motion.matrix[1][1] * c,
        );
        assert!((there.0 - there.0.round()).abs() < 1e-9 && (there.1 - there.1.round()).abs() < 1e-9);
    }

    #[test]
    fn sizes_round_half_up_and_keep_what_they_promise() {
        let mut grid = Grid::new(10, 15);
        grid.world = Some([[2.0, 0.0, 101.0], [0.0, -2.0, 499.0]]);
        let (half, back) = rescaled(&grid, Rescale::Factor(0.5, 0.5), Anchor::Edge).unwrap();
        assert_eq!((half.rows, half.columns), (5, 8));
        assert_eq!(half.world, Some([[4.0, 0.0, 102.0], [0.0, -4.0, 498.0]]));
        assert_eq!(back.apply(0.0, 0.0), (0.5, 0.5));
        let (size, _) = rescaled(&grid, Rescale::Size(4, 5), Anchor::Edge).unwrap();
        assert_eq!(size.pixel_size(), (5.0, 6.0));
        let (posts, back) = rescaled(&grid, Rescale::Size(19, 29), Anchor::Centre).unwrap();
        assert_eq!(posts.world, Some([[1.0, 0.0, 101.0], [0.0, -1.0, 499.0]]));
        assert_eq!(back.apply(18.0, 28.0), (9.0, 14.0));
        assert!(rescaled(&grid, Rescale::Factor(0.0, 1.0), Anchor::Edge).is_err());
        assert!(rescaled(&grid, Rescale::Pixel(f64::NAN, 1.0), Anchor::Edge).is_err());
    }
}
