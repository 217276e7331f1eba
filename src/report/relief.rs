//! Shaded relief: how a surface would look under a lamp at the upper left, the cartographers' custom.

/// Height of the lamp over the horizon, in degrees.
const LAMP: f64 = 45.0;
/// The slope (rise over run) that nine tenths of a shaded surface stay under, once exaggerated.
const STEEP: f64 = 0.45;

/// Light on every pixel and how far heights were exaggerated for it.
pub struct Relief {
    /// -1 (in the dark) to 1; level ground and missing pixels are 0. Rows x columns of the surface.
    pub shade: Vec<f64>,
    /// Heights were multiplied by this: 1, 2 or 5 times a power of ten.
    pub exaggeration: f64,
}

/// Shades a surface whose pixels are `(height, width)` in the unit of the values; NaN is missing.
///
/// Slopes are those of a 3 x 3 window with weights 1, 2, 1 (Horn, "Hill shading and the reflectance map", Proc. IEEE
/// 69, 1981) over a surface smoothed by the same weights, so that instrument noise does not pass for ground.
pub fn relief(surface: &[f64], rows: usize, columns: usize, (height, width): (f64, f64)) -> Relief {
    let smooth = smoothed(surface, rows, columns);
    let at = |row: usize, column: usize| smooth[row * columns + column];
    let mut slopes = Vec::with_capacity(surface.len());
    for row in 0..rows {
        for column in 0..columns {
            let here = at(row, column);
            if here.is_nan() {
                slopes.push(None);
                continue;
            }
            let (up, down) = (row.saturating_sub(1), (row + 1).min(rows - 1));
            let (left, right) = (column.saturating_sub(1), (column + 1).min(columns - 1));
            // Beside a gap the pixel's own value stands in: no cliff is invented there.
            let near = |r: usize, c: usize| if at(r, c).is_nan() { here } else { at(r, c) };
            let across = [(up, 1.0), (row, 2.0), (down, 1.0)]
                .iter()
                .map(|&(r, w)| w * (near(r, right) - near(r, left)))
                .sum::<f64>();
            let along = [(left, 1.0), (column, 2.0), (right, 1.0)]
                .iter()
                .map(|&(c, w)| w * (near(down, c) - near(up, c)))
                .sum::<f64>();
            let run = |n: usize, size: f64| 4.0 * size * n.max(1) as f64;
            slopes.push(Some((along / run(down - up, height), across / run(right - left, width))));
        }
    }
    let exaggeration = exaggeration(slopes.iter().flatten().map(|(a, b)| a.hypot(*b)).collect());
    let (up, flat) = LAMP.to_radians().sin_cos();
    let side = flat * std::f64::consts::FRAC_1_SQRT_2;
    let shade = slopes
        .iter()
        .map(|slope| {
            let Some((down, right)) = slope else { return 0.0 };
            let (down, right) = (down * exaggeration, right * exaggeration);
            // The lamp is at the upper left: ground that rises to the right or downwards faces it.
            let light = (right * side + down * side + up) / (1.0 + down * down + right * right).sqrt();
            ((light - up) / flat).clamp(-1.0, 1.0)
        })
        .collect();
    Relief { shade, exaggeration }
}

/// A round factor that brings the ninth decile of the slopes near [`STEEP`].
fn exaggeration(mut slopes: Vec<f64>) -> f64 {
    let rank = slopes.len() * 9 / 10;
    if rank >= slopes.len() {
        return 1.0;
    }
    let (_, decile, _) = slopes.select_nth_unstable_by(rank, f64::total_cmp);
    let wanted = STEEP / *decile;
    if !(wanted.is_finite() && wanted > 0.0) {
        return 1.0;
    }
    super::ticks::round_down(wanted * 1.4)
}

/// Binomial smoothing over 3 x 3 pixels, over what is there; a missing pixel stays missing.
fn smoothed(surface: &[f64], rows: usize, columns: usize) -> Vec<f64> {
    let mut out = vec![f64::NAN; surface.len()];
    for row in 0..rows {
        for column in 0..columns {
            if !surface[row * columns + column].is_finite() {
                continue;
            }
            let (mut sum, mut weight) = (0.0, 0.0);
            for r in row.saturating_sub(1)..=(row + 1).min(rows - 1) {
                for c in column.saturating_sub(1)..=(column + 1).min(columns - 1) {
                    let w = if r == row { 2.0 } else { 1.0 } * if c == column { 2.0 } else { 1.0 };
                    let v = surface[r * columns + c];
                    if v.is_finite() {
                        sum += w * v;
                        weight += w;
                    }
                }
            }
            out[row * columns + column] = sum / weight;
        }
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    fn plane(rows: usize, columns: usize, down: f64, right: f64) -> Vec<f64> {
        (0..rows * columns).map(|i| down * (i / columns) as f64 + right * (i % columns) as f64).collect()
    }

    #[test]
    fn ground_that_faces_the_lamp_is_light() {
        let middle = 3 * 9 + 4;
        // Falls towards the upper left, so it faces the lamp there.
        let facing = relief(&plane(7, 9, 0.02, 0.02), 7, 9, (2.0, 2.0));
        let averted = relief(&plane(7, 9, -0.02, -0.02), 7, 9, (2.0, 2.0));
        let level = relief(&plane(7, 9, 0.0, 0.0), 7, 9, (2.0, 2.0));
        assert!(facing.shade[middle] > 0.2 && averted.shade[middle] < -0.2);
        assert!(level.shade.iter().all(|s| s.abs() < 1e-12) && level.exaggeration == 1.0);
        // A slope of 0.0141: about 30 times makes it 0.45; 20 is the round number below 1.4 times that.
        assert_eq!(facing.exaggeration, 20.0);
    }

    #[test]
    fn pixel_sizes_and_lambert() {
        // Pixels of 3 x 2: slopes 0.3 / 3 down and 0.2 / 2 right; Lambert's law for a plane, lamp at 45 degrees.
        let got = relief(&plane(9, 11, 0.3, 0.2), 9, 11, (3.0, 2.0));
        let s = 0.1 * got.exaggeration;
        let light = (2.0 * s * 0.5 + 0.5f64.sqrt()) / (1.0 + 2.0 * s * s).sqrt();
        assert!((got.shade[4 * 11 + 5] - (light / 0.5f64.sqrt() - 1.0)).abs() < 1e-12);
    }

    #[test]
    fn gaps_make_no_cliffs() {
        let mut surface = plane(8, 9, 0.0, 0.0).iter().map(|v| v + 500.0).collect::<Vec<_>>();
        for i in [3 * 9 + 4, 3 * 9 + 5, 4 * 9 + 4] {
            surface[i] = f64::NAN;
        }
        let got = relief(&surface, 8, 9, (1.0, 1.0));
        assert!(got.shade.iter().all(|s| s.abs() < 1e-9));
        let nothing = relief(&[f64::NAN; 6], 2, 3, (1.0, 1.0));
        assert_eq!(nothing.exaggeration, 1.0);
    }
}
