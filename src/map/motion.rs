//! Motions from options: shift, turn, scale and shear about a place.

use super::Map;
use crate::error::{Error, Result};

/// `out = about + T(turn) S(scale) K(shear) (in - about) + shift`, on a grid whose pixels are `pixel` = (height, width).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Motion {
    /// Content moves down and right by so many pixels.
    pub shift: (f64, f64),
    /// Degrees, counter-clockwise as displayed (row 0 on top).
    pub turn: f64,
    /// Content grows by this factor; must be positive.
    pub scale: f64,
    /// Content moves right by this many pixels per row.
    pub shear: f64,
    /// The place (row, column) that turn, scale and shear leave alone.
    pub about: (f64, f64),
    /// Height and width of a pixel; only their ratio counts. Turns are done in world units, so that a circle stays one.
    pub pixel: (f64, f64),
}

impl Motion {
    /// No motion, about the centre of a raster of this size with square pixels.
    pub fn about_centre(rows: usize, columns: usize) -> Self {
        Motion {
            shift: (0.0, 0.0),
            turn: 0.0,
            scale: 1.0,
            shear: 0.0,
            about: ((rows as f64 - 1.0) / 2.0, (columns as f64 - 1.0) / 2.0),
            pixel: (1.0, 1.0),
        }
    }

    /// The map from input to output positions.
    ///
    /// # Errors
    /// When a number is not finite or the scale is not positive.
    pub fn map(&self) -> Result<Map> {
        let all = [self.shift.0, self.shift.1, self.turn, self.scale, self.shear, self.about.0, self.about.1];
        if all.iter().any(|v| !v.is_finite()) {
            return Err(Error::usage("shift, turn, scale, shear and about must be finite numbers", ""));
        }
        if self.turn.abs() > 1e9 {
            return Err(Error::usage(
                format!("--turn {}: so many degrees have no fraction left to turn by", self.turn),
                "give degrees between -360 and 360",
            ));
        }
        if self.scale <= 0.0 {
            return Err(Error::usage(
                format!("--scale {} is not positive", self.scale),
                "use a factor above 0, such as 0.5",
            ));
        }
        let (sin, cos) = sin_cos_degrees(self.turn);
        let ratio = self.pixel.0 / self.pixel.1;
        let (s, k) = (self.scale, self.shear);
        // With y down and the turn counter-clockwise as displayed: right (0, 1) goes to (-sin, cos), up.
        let (rr, rc) = (cos * s, -sin / ratio * s);
        let (cr, cc) = (sin * ratio * s, cos * s);
        // The shear acts first: (r, c) -> (r, c + k r).
        let (rr, cr) = (rr + rc * k, cr + cc * k);
        let about = self.about;
        let offset = |m: f64, n: f64, a: f64, shift: f64| a - (m * about.0 + n * about.1) + shift + 0.0;
        Ok(Map::affine([
            [rr + 0.0, rc + 0.0, offset(rr, rc, about.0, self.shift.0)],
            [cr + 0.0, cc + 0.0, offset(cr, cc, about.1, self.shift.1)],
        ]))
    }
}

/// Sine and cosine of an angle in degrees, exact at multiples of 90.
pub(crate) fn sin_cos_degrees(degrees: f64) -> (f64, f64) {
    let quarter = (degrees / 90.0).round();
    let (sin, cos) = (degrees - quarter * 90.0).to_radians().sin_cos();
    match quarter.rem_euclid(4.0) as u8 {
        0 => (sin, cos),
        1 => (cos, -sin),
        2 => (-sin, -cos),
        _ => (-cos, sin),
    }
}
