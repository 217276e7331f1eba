//! How far the uncertainty of a sum over a window of outputs is underestimated if the correlation that the resampling
//! made between them is forgotten.
//!
//! For white noise the variance of the sum is the sum of squares of what all outputs of the window together take of each
//! sample; without correlation it would be the sum of their own variances. The factor is the root of the quotient.

use crate::kernel::Shape;
use crate::map::Map;
use crate::resample::axis::{Axis, Way};
use crate::resample::{Cells, Effective, Plan, Rules, corners};
use std::collections::HashMap;

/// Sides of the windows.
pub const SIDES: [usize; 4] = [2, 5, 10, 50];

/// Windows looked at: sub-pixel phase matters most for the small ones.
fn places(side: usize) -> usize {
    if side < 10 { 5 } else { 1 }
}

/// The factor for each of [`SIDES`]; `None` where weights fall on whole lines of a turned raster.
pub fn underestimates(
    plan: &Plan,
    rules: &Rules,
    source: (usize, usize),
    target: (usize, usize),
) -> [Option<f64>; 4] {
    SIDES.map(|side| {
        let places = (0..places(side)).map(|p| {
            // Spread by the golden ratio and its companion (common practice, no source).
            let at =
                |ratio: f64, n: usize| ((p as f64 + 0.5) * ratio).fract() * n.saturating_sub(side) as f64;
            (at(0.754_877_666_246_692_7, target.0) as i64, at(0.569_840_290_998_053_2, target.1) as i64)
        });
        let mut sum = 0.0;
        for place in places {
            sum += match plan {
                Plan::Copy { .. } => 1.0,
                Plan::RowsAndColumns { rows, columns, .. } => {
                    along(rows, rules, place.0, side) * along(columns, rules, place.1, side)
                }
                _ if matches!(rules.kernel.shape(), Shape::Sinc | Shape::Polynomial) => return None,
                _ => turned(plan, rules, source, place, side),
            };
        }
        Some((sum / self::places(side) as f64).sqrt())
    })
}

/// Variance of the sum over the sum of variances, along one axis.
fn along(axis: &Axis, rules: &Rules, first: i64, side: usize) -> f64 {
    let effective = Effective::new(&rules.kernel, rules.edges(), axis);
    let mut together: HashMap<i64, f64> = HashMap::new();
    let (mut alone, mut weights) = (0.0, Vec::new());
    for o in first..first + side as i64 {
        let start = effective.unfolded(o, &mut weights);
        for (w, k) in weights.iter().zip(start..) {
            *together.entry(k).or_default() += w;
            alone += w * w;
        }
    }
    quotient(together.values(), alone)
}

/// The same for a plan whose pixels are turned: each looks at a place of its own.
fn turned(plan: &Plan, rules: &Rules, source: (usize, usize), first: (i64, i64), side: usize) -> f64 {
    let back = plan.back();
    let mut together: HashMap<(i64, i64), f64> = HashMap::new();
    let mut alone = 0.0;
    let mut cells = Cells::default();
    let mut axes = upright(plan, rules, source, &back, first);
    let (mut down, mut across) = (Vec::new(), Vec::new());
    for r in first.0..first.0 + side as i64 {
        for c in first.1..first.1 + side as i64 {
            let mut take = |i: i64, k: i64, w: f64| {
                *together.entry((i, k)).or_default() += w;
                alone += w * w;
            };
            if matches!(plan, Plan::Overlap { .. } | Plan::Majority { .. }) {
                cells.under(&corners(&back, r as f64, c as f64), None, take);
                continue;
            }
            let (x, y) = back.apply(r as f64, c as f64);
            axes.0.look_at(x);
            axes.1.look_at(y);
            let (top, left) = (axes.0.unfolded(0, &mut down), axes.1.unfolded(0, &mut across));
            for (a, i) in down.iter().zip(top..) {
                across.iter().zip(left..).for_each(|(b, k)| take(i, k, a * b));
            }
        }
    }
    quotient(together.values(), alone)
}

/// Axes with the steps that the image of an output pixel has along the input's axes.
fn upright(
    plan: &Plan,
    rules: &Rules,
    source: (usize, usize),
    back: &Map,
    at: (i64, i64),
) -> (Effective, Effective) {
    let at = (at.0 as f64, at.1 as f64);
    let (x, y) = back.apply(at.0, at.1);
    let kernel = &rules.kernel;
    let j = back.jacobian(at.0, at.1);
    let axis = |n: usize, offset: f64, j: [f64; 2], stretch: f64| {
        let way = match plan {
            Plan::Shear(_) => Way::Conserve,
            _ if stretch > 1.0 && kernel.is_prefiltered() => Way::WidenThenPrefilter(stretch),
            _ if stretch > 1.0 => Way::Widen(stretch),
            _ if kernel.is_prefiltered() => Way::Interpolate,
            _ => Way::Taps,
        };
        let step = if matches!(plan, Plan::Shear(_)) { j[0].hypot(j[1]) } else { stretch };
        Effective::new(kernel, rules.edges(), &Axis { source: n, target: n, step, offset, way })
    };
    let stretch = match plan {
        Plan::Gather { stretch, .. } => *stretch,
        _ => (1.0, 1.0),
    };
    (axis(source.0, x, j[0], stretch.0), axis(source.1, y, j[1], stretch.1))
}

/// Overshoot of an edge as a fraction of its height, of a plan whose kernel was widened: the greatest response to an edge.
pub fn widened_overshoot(plan: &Plan, rules: &Rules, source: (usize, usize)) -> Option<f64> {
    step_response(plan, rules, source).into_iter().map(|s| s.1 - 1.0).reduce(f64::max).map(|o| o.max(0.0))
}

/// The response to an edge of unit height along rows: position in input pixels from the edge, and value. Empty for a copy and
/// for kernels that look at whole lines.
pub fn step_response(plan: &Plan, rules: &Rules, source: (usize, usize)) -> Vec<(f64, f64)> {
    if matches!(plan, Plan::Copy { .. }) || matches!(rules.kernel.shape(), Shape::Sinc | Shape::Polynomial) {
        return Vec::new();
    }
    let mut effective = match plan {
        Plan::RowsAndColumns { rows, .. } => Effective::new(&rules.kernel, rules.edges(), rows),
        Plan::Overlap { back } | Plan::Majority { back } => {
            let j = back.jacobian(0.0, 0.0);
            let a = j[0][0].hypot(j[0][1]);
            let way = Way::Area(a);
            let axis = Axis { source: source.0, target: source.0, step: a, offset: 0.0, way };
            Effective::new(&rules.kernel, rules.edges(), &axis)
        }
        _ => upright(plan, rules, source, &plan.back(), (0, 0)).0,
    };
    // Far from the line's ends, where nothing is clipped.
    let middle = (source.0 / 2) as f64;
    let reach = 6.0 * effective.step().max(1.0);
    let mut weights = Vec::new();
    (0..=240)
        .map(|i| {
            let x = reach * (i as f64 / 120.0 - 1.0);
            effective.look_at(middle + 0.5 + x);
            let first = effective.unfolded(0, &mut weights);
            // Samples beyond the edge are 1; it lies halfway between two of them. Totals are shown as densities.
            let all: f64 = weights.iter().sum();
            let beyond: f64 =
                weights.iter().zip(first..).filter(|(_, k)| *k as f64 > middle).map(|(w, _)| w).sum();
            (x, beyond / if all != 0.0 { all } else { 1.0 })
        })
        .collect()
}

fn quotient<'a>(together: impl Iterator<Item = &'a f64>, alone: f64) -> f64 {
    if alone > 0.0 { together.map(|w| w * w).sum::<f64>() / alone } else { 1.0 }
}
