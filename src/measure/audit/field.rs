//! A displacement that changes linearly over the frame, drawn robustly through the votes of tiles.

use super::solve::{invert, median};
use crate::map::Map;
use serde::Serialize;

/// The displacement that one tile found, in input pixels.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Vote {
    /// Where (row, column).
    pub at: (f64, f64),
    /// Displacement along rows and columns, positive down and right.
    pub by: (f64, f64),
    /// Variance along rows and columns.
    pub variance: (f64, f64),
}

/// The frame over which displacement is judged: its middle and half its extent, input pixels.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Extent {
    /// Middle (row, column).
    pub middle: [f64; 2],
    /// Half of the height and of the width.
    pub half: [f64; 2],
}

/// Displacement = at_centre + gradient (position - middle) / half, in input pixels.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Field {
    /// Displacement (rows, columns) in the middle of the frame.
    pub at_centre: [f64; 2],
    /// What is added from the middle to the lower edge (first column of each row) and to the right edge (second).
    pub gradient: [[f64; 2]; 2],
    /// Standard error of `at_centre`, the larger of both axes.
    pub sigma: f64,
    /// Standard error of `gradient`, the largest.
    pub gradient_sigma: f64,
    /// Robust spread of the tiles about the field (1.4826 times the median of the moduli).
    pub scatter: f64,
    /// Whether the tiles lie far enough apart to tell the gradient.
    pub has_gradient: bool,
    /// Where the field holds.
    pub extent: Extent,
}

/// No tile is trusted beyond this: kernels differ by some thousandths of a pixel.
const FLOOR: f64 = 2e-3;

/// Draws the field through the votes; `None` without votes.
pub fn fit(votes: &[Vote], extent: Extent) -> Option<Field> {
    if votes.is_empty() {
        return None;
    }
    let place = |v: &Vote| {
        [
            1.0,
            (v.at.0 - extent.middle[0]) / extent.half[0].max(0.5),
            (v.at.1 - extent.middle[1]) / extent.half[1].max(0.5),
        ]
    };
    let places: Vec<[f64; 3]> = votes.iter().map(place).collect();
    // A gradient needs votes on both sides; four at least for each of its numbers.
    let spread = |k: usize| {
        let (low, high) =
            places.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |a, p| (a.0.min(p[k]), a.1.max(p[k])));
        high - low > 0.3 && votes.len() >= 6
    };
    let free = [true, spread(1), spread(2)];
    let axes = [|v: &Vote| (v.by.0, v.variance.0), |v: &Vote| (v.by.1, v.variance.1)];
    let mut factors = vec![1.0; votes.len()];
    let mut lines = [[0.0; 3]; 2];
    let mut scatter = 0.0;
    let mut errors = [[0.0; 3]; 2];
    // The sum of moduli first, which outliers cannot lead astray; then Tukey's biweight about it (Beaton and Tukey 1974,
    // Technometrics 16(2):147-185, with the usual 4.685 spreads).
    for round in 0..24 {
        let inverses = [0, 1].map(|k| {
            let weights: Vec<f64> =
                votes.iter().zip(&factors).map(|(v, f)| f / (axes[k](v).1 + FLOOR * FLOOR)).collect();
            line(&places, &weights, votes.iter().map(|v| axes[k](v).0), free)
        });
        for k in 0..2 {
            let (fitted, error) = inverses[k]?;
            lines[k] = fitted;
            errors[k] = error;
        }
        let left: Vec<[f64; 2]> = votes
            .iter()
            .zip(&places)
            .map(|(v, p)| [0, 1].map(|k| axes[k](v).0 - dot(&lines[k], p)))
            .collect();
        scatter = 1.4826 * median(left.iter().flatten().map(|v| v.abs()).collect());
        let wide = scatter.max(FLOOR);
        for ((f, l), v) in factors.iter_mut().zip(&left).zip(votes) {
            let length = l[0].hypot(l[1]);
            *f = if round < 12 {
                let expected = (v.variance.0 + v.variance.1).sqrt().max(FLOOR);
                1.0 / (length / expected).max(1.0)
            } else {
                let u = length / (4.685 * wide.max((0.5 * (v.variance.0 + v.variance.1)).sqrt()));
                if u < 1.0 { (1.0 - u * u).powi(2) } else { 0.0 }
            };
        }
        if factors.iter().all(|f| *f == 0.0) {
            return None;
        }
    }
    // What the tiles disagree by counts where it exceeds what they told; overlapping tiles are half independent.
    let told =
        (votes.iter().map(|v| 0.5 * (v.variance.0 + v.variance.1)).sum::<f64>() / votes.len() as f64).sqrt();
    let inflate = (2.0f64).sqrt() * (scatter / told.hypot(FLOOR)).max(1.0);
    let sigma = errors[0][0].max(errors[1][0]) * inflate;
    let gradient_sigma = errors.iter().flat_map(|e| &e[1..]).fold(0.0f64, |a, e| a.max(*e)) * inflate;
    Some(Field {
        at_centre: [lines[0][0], lines[1][0]],
        gradient: [[lines[0][1], lines[0][2]], [lines[1][1], lines[1][2]]],
        sigma,
        gradient_sigma,
        scatter,
        has_gradient: free[1] || free[2],
        extent,
    })
}

fn dot(line: &[f64; 3], place: &[f64; 3]) -> f64 {
    line.iter().zip(place).map(|(a, b)| a * b).sum()
}

/// Weighted least squares of the free terms; the numbers and their standard errors.
fn line(
    places: &[[f64; 3]],
    weights: &[f64],
    values: impl Iterator<Item = f64>,
    free: [bool; 3],
) -> Option<([f64; 3], [f64; 3])> {
    let mut normal = [[0.0; 3]; 3];
    let mut right_side = [0.0; 3];
    for ((p, w), v) in places.iter().zip(weights).zip(values) {
        for a in 0..3 {
            right_side[a] += w * p[a] * v;
            for b in 0..3 {
                normal[a][b] += w * p[a] * p[b];
            }
        }
    }
    for a in 0..3 {
        if !free[a] {
            // A term that is not asked for is held at 0.
            for b in 0..3 {
                (normal[a][b], normal[b][a]) = (0.0, 0.0);
            }
            normal[a][a] = 1.0;
            right_side[a] = 0.0;
        }
    }
    let inverse = invert(&normal)?;
    let fitted = std::array::from_fn(|a| (0..3).map(|b| inverse[a][b] * right_side[b]).sum());
    let error = std::array::from_fn(|a| if free[a] { inverse[a][a].sqrt() } else { 0.0 });
    Some((fitted, error))
}

impl Field {
    /// The displacement at a place (row, column).
    pub fn at(&self, row: f64, column: f64) -> (f64, f64) {
        let u = [
            (row - self.extent.middle[0]) / self.extent.half[0].max(0.5),
            (column - self.extent.middle[1]) / self.extent.half[1].max(0.5),
        ];
        let g = &self.gradient;
        (
            self.at_centre[0] + g[0][0] * u[0] + g[0][1] * u[1],
            self.at_centre[1] + g[1][0] * u[0] + g[1][1] * u[1],
        )
    }

    /// The map that takes a place to the one whose content is displaced onto it (to first order in the gradient). Terms
    /// within their error are left out, so that rows and columns stay apart where they can.
    pub fn undone(&self) -> Map {
        let h = self.extent.half.map(|h| h.max(0.5));
        let bound = self.gradient_bound();
        let row = |k: usize| {
            let term =
                |i: usize| if self.gradient[k][i].abs() > bound { self.gradient[k][i] / h[i] } else { 0.0 };
            let (r, c) = (term(0), term(1));
            let m = self.extent.middle;
            (r, c, self.at_centre[k] - r * m[0] - c * m[1])
        };
        let ((a, b, t), (d, e, u)) = (row(0), row(1));
        Map::affine([[1.0 - a, -b, -t], [-d, 1.0 - e, -u]])
    }

    /// What [`Field::undone`] undoes at a place (row, column).
    pub fn undone_at(&self, row: f64, column: f64) -> (f64, f64) {
        let (r, c) = self.undone().apply(row, column);
        (row - r, column - c)
    }

    /// A constant displacement, or one that grows along both axes from the middle to the edges; taken for exact.
    pub fn assumed(at_centre: [f64; 2], growth: [f64; 2], extent: Extent) -> Self {
        Field {
            at_centre,
            gradient: [[growth[0], 0.0], [0.0, growth[1]]],
            sigma: 0.0,
            gradient_sigma: 0.0,
            scatter: 0.0,
            has_gradient: true,
            extent,
        }
    }

    /// The same field with the errors of a fit to the tiles, and half of what it is off that fit added.
    pub fn told_by(&self, fitted: &Field) -> Field {
        let [r, c] = [0, 1].map(|k| self.at_centre[k] - fitted.at_centre[k]);
        Field {
            sigma: fitted.sigma.hypot(0.5 * r.hypot(c)),
            gradient_sigma: fitted.gradient_sigma.hypot(0.5 * self.differs_by(fitted)),
            scatter: fitted.scatter,
            ..*self
        }
    }

    /// The largest difference to another field at the frame's corners and in its middle.
    pub fn differs_by(&self, other: &Field) -> f64 {
        let (m, h) = (self.extent.middle, self.extent.half);
        [(0.0, 0.0), (-1.0, -1.0), (-1.0, 1.0), (1.0, -1.0), (1.0, 1.0)].iter().fold(0.0, |most, (r, c)| {
            let at = (m[0] + r * h[0], m[1] + c * h[1]);
            let (a, b) = (self.at(at.0, at.1), other.at(at.0, at.1));
            most.max((a.0 - b.0).hypot(a.1 - b.1))
        })
    }

    fn gradient_bound(&self) -> f64 {
        (4.0 * self.gradient_sigma).max(0.02)
    }

    /// Whether the displacement changes over the frame by more than its error and a fiftieth of a pixel.
    pub fn is_uneven(&self) -> bool {
        let bound = self.gradient_bound();
        self.gradient.iter().flatten().any(|g| g.abs() > bound)
    }

    /// Whether there is any displacement to speak of.
    pub fn is_displaced(&self) -> bool {
        self.is_uneven() || self.at_centre[0].hypot(self.at_centre[1]) > (4.0 * self.sigma).max(0.02)
    }

    /// The largest displacement in the frame (its length): in the middle, or at a corner if it changes.
    pub fn largest(&self) -> f64 {
        let centre = self.at_centre[0].hypot(self.at_centre[1]);
        if !self.is_uneven() {
            return centre;
        }
        let (m, h) = (self.extent.middle, self.extent.half);
        [(-1.0, -1.0), (-1.0, 1.0), (1.0, -1.0), (1.0, 1.0)].iter().fold(centre, |most, (r, c)| {
            let d = self.at(m[0] + r * h[0], m[1] + c * h[1]);
            most.max(d.0.hypot(d.1))
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::pattern::normal;

    #[test]
    fn a_line_is_found_among_votes_that_lie() {
        let extent = Extent { middle: [50.0, 80.0], half: [50.0, 80.0] };
        let votes: Vec<Vote> = (0..64u64)
            .map(|i| {
                let at = (6.0 + 12.5 * (i / 8) as f64, 10.0 + 20.0 * (i % 8) as f64);
                let mut by = (
                    0.3 + 0.2 * (at.0 - 50.0) / 50.0 + 0.01 * normal(1, i),
                    -0.5 + 0.1 * (at.0 - 50.0) / 50.0 + 0.01 * normal(2, i),
                );
                // One in six is somewhere else.
                if i % 6 == 0 {
                    by = (4.0, 3.0 * normal(3, i));
                }
                Vote { at, by, variance: (1e-4, 1e-4) }
            })
            .collect();
        let Some(f) = fit(&votes, extent) else { panic!("no field") };
        let near =
            |a: f64, b: f64| assert!((a - b).abs() < 5.0 * f.sigma.max(f.gradient_sigma), "{a} {b} {f:?}");
        near(f.at_centre[0], 0.3);
        near(f.at_centre[1], -0.5);
        near(f.gradient[0][0], 0.2);
        near(f.gradient[1][0], 0.1);
        near(f.gradient[0][1], 0.0);
        assert!(f.sigma < 5e-3 && f.is_uneven());
        assert!((f.largest() - 0.5f64.hypot(0.4)).abs() < 0.02);
        assert!(fit(&[], extent).is_none());
    }

    #[test]
    fn few_votes_give_a_constant() {
        let extent = Extent { middle: [5.0, 5.0], half: [5.0, 5.0] };
        let vote = |by| Vote { at: (1.0, 2.0), by, variance: (1e-4, 1e-4) };
        let Some(f) = fit(&[vote((0.4, 0.0)), vote((0.6, 0.0))], extent) else { panic!("no field") };
        assert!((f.at_centre[0] - 0.5).abs() < 1e-9 && !f.has_gradient && !f.is_uneven());
    }
}
