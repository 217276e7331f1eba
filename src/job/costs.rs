//! Hands the measures what they ask: the operators of a plan, and pixels to look at.

use crate::kernel::{Kernel, Shape};
use crate::map::Map;
use crate::measure::{AxisOperator, Costs, Pixel, measure_costs};
use crate::resample::axis::{Axis, Way, is_inside};
use crate::resample::gram_symbol;
use crate::resample::weights::Weigher;
use crate::resample::{Outside, Plan, Rules};

/// What the resampling costs, from its weights.
pub fn costs(
    plan: &Plan,
    rules: &Rules,
    source: (usize, usize),
    target: (usize, usize),
    back: &Map,
) -> Costs {
    let (rows, columns, pixels) = operators(plan, rules, source, target, back);
    measure_costs(&rows, &columns, &pixels)
}

/// The operators that act on input rows and columns, and pixels to look at.
pub fn operators<'a>(
    plan: &Plan,
    rules: &'a Rules,
    source: (usize, usize),
    target: (usize, usize),
    back: &Map,
) -> (AxisOperator<'a>, AxisOperator<'a>, Vec<Pixel>) {
    let kernel = &rules.kernel;
    let line = |n: usize, step: f64, way: Way| Axis { source: n, target: n, step, offset: 0.0, way };
    let (rows, columns) = match plan {
        Plan::Copy { .. } => (line(source.0, 1.0, Way::Copy), line(source.1, 1.0, Way::Copy)),
        // Operators belong to the input's axes; a swapped plan's row axis reads input columns.
        Plan::RowsAndColumns { swapped: false, rows, columns } => (*rows, *columns),
        Plan::RowsAndColumns { swapped: true, rows, columns } => (*columns, *rows),
        Plan::Gather { stretch, least_squares, .. } => {
            let way = |a: f64| match kernel.shape() {
                Shape::Sinc => Way::Fourier(a),
                Shape::Polynomial => Way::Polynomial,
                // The lattice of the least-squares spline stands for itself, seen at its nodes.
                _ if *least_squares && a > 1.0 => Way::LeastSquares(a),
                _ if kernel.is_prefiltered() && a > 1.0 => Way::WidenThenPrefilter(a),
                _ if a > 1.0 => Way::Widen(a),
                _ if kernel.is_prefiltered() => Way::Interpolate,
                _ => Way::Taps,
            };
            (line(source.0, stretch.0, way(stretch.0)), line(source.1, stretch.1, way(stretch.1)))
        }
        Plan::Shear(_) => {
            // Cells of the turned pixel's extent along each axis stand for the three passes together.
            let j = back.jacobian(0.0, 0.0);
            let cell = |n: usize, v: [f64; 2]| line(n, v[0].hypot(v[1]), Way::Conserve);
            (cell(source.0, j[0]), cell(source.1, j[1]))
        }
        Plan::Overlap { back } | Plan::Majority { back } => {
            // A turned pixel's shadow on each axis, as a box of the same extent.
            let j = back.jacobian(target.0 as f64 / 2.0, target.1 as f64 / 2.0);
            let extent = |v: [f64; 2]| v[0].hypot(v[1]);
            (
                line(source.0, extent(j[0]), Way::Area(extent(j[0]))),
                line(source.1, extent(j[1]), Way::Area(extent(j[1]))),
            )
        }
    };
    let taps = [&rows, &columns].iter().map(|a| taps_of(a, kernel)).max().unwrap_or(4);
    let count = (4096 / taps.max(1)).clamp(8, 64);
    let pixels = sample_pixels(back, rules.outside, source, target, count);
    (operator(&rows, rules), operator(&columns, rules), pixels)
}

fn taps_of(axis: &Axis, kernel: &Kernel) -> usize {
    match axis.way {
        Way::Fourier(_) | Way::Polynomial => axis.source,
        Way::Widen(a) | Way::WidenThenPrefilter(a) | Way::LeastSquares(a) | Way::Area(a) => {
            (2.0 * kernel.radius() * (a + 1.0)) as usize
        }
        Way::Conserve if matches!(kernel.shape(), Shape::Sinc | Shape::Polynomial) => axis.source,
        Way::Conserve => (2.0 * kernel.radius() + axis.step.abs()) as usize + 1,
        _ => kernel.taps().unwrap_or(1),
    }
}

fn operator<'a>(axis: &Axis, rules: &'a Rules) -> AxisOperator<'a> {
    let kernel = &rules.kernel;
    let symbol = || kernel.is_prefiltered().then(|| kernel.symbol());
    let weigher = Weigher::new(kernel, rules.edges(), axis);
    AxisOperator {
        weights: Box::new(move |x, out| weigher.weights(x, out)),
        before: axis.filters_input().then(symbol).flatten(),
        after: match axis.way {
            Way::WidenThenPrefilter(_) => symbol(),
            Way::LeastSquares(_) => Some(gram_symbol(kernel)),
            _ => None,
        },
        finish: matches!(axis.way, Way::LeastSquares(_)).then(|| kernel.symbol()),
        pitch: axis.step.abs(),
        copied: axis.way == Way::Copy,
    }
}

/// Pixels spread evenly over the output by the golden ratio and its plane companion (Roberts' sequence; common practice, no
/// source), those whose centre is inside first.
fn sample_pixels(
    back: &Map,
    outside: Outside,
    source: (usize, usize),
    target: (usize, usize),
    count: usize,
) -> Vec<Pixel> {
    let pixel = |r: f64, c: f64| Pixel {
        at: back.apply(r, c),
        next_row: back.apply(r + 1.0, c),
        next_column: back.apply(r, c + 1.0),
    };
    let spread = (0..16 * count).map(|i| {
        let part = |ratio: f64, n: usize| ((i as f64 * ratio + 0.5).fract() * n as f64).floor();
        pixel(part(0.754_877_666_246_692_7, target.0), part(0.569_840_290_998_053_2, target.1))
    });
    let seen = |p: &Pixel| {
        outside == Outside::Extend || (is_inside(p.at.0, source.0) && is_inside(p.at.1, source.1))
    };
    let chosen: Vec<Pixel> = spread.filter(seen).take(count).collect();
    if chosen.is_empty() { vec![pixel(0.0, 0.0)] } else { chosen }
}
