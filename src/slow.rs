//! The slow truth: every resampling as a direct f64 sum from the formulas, against which the passes are judged.
//!
//! Nothing here is shared with the passes but the kernel's basis function, the extension's rule and the map. Prefilters are
//! dense linear solves with pivoting, projections are integrals by quadrature, the sinc is a sum of cosines. The
//! cost is cubic in the line's length: for rasters of some dozens of samples a side.

use crate::kernel::{Extension, Kernel, Place, Shape};
use crate::map::Map;
use crate::resample::axis::is_inside;
use crate::resample::{Outside, Reduce, Rules, Size};
use std::f64::consts::PI;

/// Samples of the extended line that stand for the infinite one: |pole|^REACH is far below rounding.
const REACH: i64 = 110;

/// Resamples one band without missing samples: `values` row by row, `source` and `target` as (rows, columns). NaN outside
/// under [`Outside::Missing`].
pub fn resample(values: &[f64], source: Size, target: Size, back: &Map, rules: &Rules) -> Vec<f64> {
    let separable = back.as_axes();
    let stretch = |r: f64, c: f64| -> (f64, f64) {
        let widens = rules.reduce != Reduce::None && !matches!(rules.kernel.name(), "nearest" | "bspline:0");
        let j = back.jacobian(r, c);
        let norm = |v: [f64; 2]| {
            let n = v[0].hypot(v[1]);
            if widens && n > 1.0 + 1e-9 { n } else { 1.0 }
        };
        (norm(j[0]), norm(j[1]))
    };
    let at = |r: usize, c: usize| back.apply(r as f64, c as f64);
    let there = |x: f64, y: f64| {
        rules.outside == Outside::Extend || (is_inside(x, source.0) && is_inside(y, source.1))
    };
    let mut out = vec![f64::NAN; target.0 * target.1];
    if let Some(axes) = separable {
        let s = stretch(0.0, 0.0);
        let (of_row, of_column) =
            if axes.swapped { (axes.columns, axes.rows) } else { (axes.rows, axes.columns) };
        let (n_row, n_column) = if axes.swapped { (source.1, source.0) } else { source };
        let (s_row, s_column) = if axes.swapped { (s.1, s.0) } else { s };
        let rows = lines(&Line::new(n_row, rules, s_row, of_row.0.abs()), target.0, of_row, rules);
        let columns =
            lines(&Line::new(n_column, rules, s_column, of_column.0.abs()), target.1, of_column, rules);
        let sample = |i: usize, j: usize| {
            if axes.swapped { values[j * source.1 + i] } else { values[i * source.1 + j] }
        };
        for r in 0..target.0 {
            for c in 0..target.1 {
                let (x, y) = at(r, c);
                if there(x, y) {
                    out[r * target.1 + c] = product(&rows[r], &columns[c], sample);
                }
            }
        }
        return out;
    }
    if *rules.kernel.shape() == Shape::Area {
        return overlap(values, source, target, back, rules, there);
    }
    let s = stretch(0.0, 0.0);
    let mut lines = (Line::new(source.0, rules, s.0, 1.0), Line::new(source.1, rules, s.1, 1.0));
    lines.0.solve_lattice();
    lines.1.solve_lattice();
    let any_wide = (0..target.0).any(|r| (0..target.1).any(|c| stretch(r as f64, c as f64) != (1.0, 1.0)));
    for r in 0..target.0 {
        for c in 0..target.1 {
            let (x, y) = at(r, c);
            if there(x, y) {
                let s = stretch(r as f64, c as f64);
                (lines.0.stretch, lines.1.stretch) = s;
                let (wr, wc) = (lines.0.free(x, any_wide), lines.1.free(y, any_wide));
                out[r * target.1 + c] = product(&wr, &wc, |i, j| values[i * source.1 + j]);
            }
        }
    }
    out
}

/// Means over the images of output pixels: the area shared with each cell by integrating the image's clamped width.
fn overlap(
    values: &[f64],
    source: Size,
    target: Size,
    back: &Map,
    rules: &Rules,
    there: impl Fn(f64, f64) -> bool,
) -> Vec<f64> {
    let mut out = Vec::new();
    for r in 0..target.0 {
        for c in 0..target.1 {
            let (r, c) = (r as f64, c as f64);
            let (x, y) = back.apply(r, c);
            let corners =
                [(-0.5, -0.5), (-0.5, 0.5), (0.5, 0.5), (0.5, -0.5)].map(|d| back.apply(r + d.0, c + d.1));
            let (mut sum, mut area) = (0.0, 0.0);
            let around = |v: f64, i: usize| {
                let reach =
                    corners.iter().map(|p| ([p.0, p.1][i] - v).abs()).fold(0.0, f64::max).ceil() as i64 + 1;
                v.round() as i64 - reach..=v.round() as i64 + reach
            };
            for i in around(x, 0) {
                for j in around(y, 1) {
                    let a = shared_area(&corners, i as f64, j as f64);
                    if a == 0.0 {
                        continue;
                    }
                    // Extended along the row, then along the column.
                    let extended = |k: i64, n: usize| {
                        let line = Line::new(
                            n,
                            &Rules { kernel: Kernel::parse("nearest").unwrap_or_default(), ..rules.clone() },
                            1.0,
                            1.0,
                        );
                        let gone = line.open() && !(0..n as i64).contains(&k);
                        (!gone).then(|| line.extended(k))
                    };
                    if let (Some(wr), Some(wc)) = (extended(i, source.0), extended(j, source.1)) {
                        sum += a * product(&wr, &wc, |p, q| values[p * source.1 + q]);
                        area += a;
                    }
                }
            }
            out.push(if there(x, y) && area > 0.0 { sum / area } else { f64::NAN });
        }
    }
    out
}

/// The area that a convex quadrilateral shares with the cell about (row, column).
fn shared_area(corners: &[(f64, f64); 4], row: f64, column: f64) -> f64 {
    let edges: Vec<((f64, f64), (f64, f64))> = (0..4).map(|i| (corners[i], corners[(i + 1) % 4])).collect();
    // The columns between which the quadrilateral lies at a given row.
    let span = |r: f64| {
        let mut span = (f64::INFINITY, f64::NEG_INFINITY);
        for (p, q) in &edges {
            if (p.0 - r) * (q.0 - r) <= 0.0 && p.0 != q.0 {
                let c = p.1 + (r - p.0) / (q.0 - p.0) * (q.1 - p.1);
                span = (span.0.min(c), span.1.max(c));
            }
        }
        span
    };
    let width = |r: f64| {
        let s = span(r);
        (s.1.min(column + 0.5) - s.0.max(column - 0.5)).max(0.0)
    };
    // The width is linear between corners and crossings of the cell's sides.
    let mut knots = vec![row - 0.5, row + 0.5];
    knots.extend(corners.iter().map(|p| p.0));
    for (p, q) in &edges {
        for side in [column - 0.5, column + 0.5] {
            if p.1 != q.1 {
                knots.push(p.0 + (side - p.1) / (q.1 - p.1) * (q.0 - p.0));
            }
        }
    }
    knots.retain(|k| (row - 0.5..=row + 0.5).contains(k));
    knots.sort_by(f64::total_cmp);
    // Midpoints: exact for what is linear, and never on an edge that runs along a row.
    knots.windows(2).map(|w| (w[1] - w[0]) * width(0.5 * (w[0] + w[1]))).sum()
}

/// Weights on the samples of a line, and a constant last.
type Row = Vec<f64>;

/// `sum_i R_i (sum_j C_j f_ij + C_const) + R_const`; NaN where a row says that there is nothing.
fn product(rows: &Row, columns: &Row, sample: impl Fn(usize, usize) -> f64) -> f64 {
    let (n, m) = (rows.len() - 1, columns.len() - 1);
    let line = |i: usize| (0..m).map(|j| columns[j] * sample(i, j)).sum::<f64>() + columns[m];
    (0..n).map(|i| rows[i] * line(i)).sum::<f64>() + rows[n]
}

struct Line {
    n: usize,
    kernel: Kernel,
    extension: Extension,
    stretch: f64,
    cell: f64,
    least_squares: bool,
    /// Least squares was asked for, whether or not this axis shrinks.
    projecting: bool,
    /// Coefficient k (from -reach) as weights on samples; empty without prefilter.
    coefficients: Vec<Row>,
    reach: i64,
    /// The prefilter's impulse response, centre at REACH.
    impulse: Vec<f64>,
    /// Least-squares coefficients for free positions, from index -REACH (0 for an open line), as weights on samples.
    lattice: Vec<Row>,
}

impl Line {
    fn new(n: usize, rules: &Rules, stretch: f64, cell: f64) -> Self {
        let mut line = Line {
            n,
            kernel: rules.kernel.clone(),
            extension: rules.extension,
            stretch,
            cell,
            least_squares: rules.reduce == Reduce::LeastSquares && stretch > 1.0,
            projecting: rules.reduce == Reduce::LeastSquares,
            coefficients: Vec::new(),
            reach: REACH,
            impulse: Vec::new(),
            lattice: Vec::new(),
        };
        if rules.kernel.is_prefiltered() {
            // Under least squares, outputs as far as REACH outside look at coefficients farther still.
            line.reach = if line.least_squares { REACH * (stretch.ceil() as i64 + 1) } else { REACH };
            let data: Vec<Row> = (-line.reach..n as i64 + line.reach).map(|k| line.extended(k)).collect();
            let phi = |t: f64| line.kernel.weight(t);
            line.coefficients = deconvolve(phi, data, line.open().then_some((-line.reach, n)));
            let len = 2 * REACH as usize + 1;
            let delta = (0..len).map(|k| vec![if k == REACH as usize { 1.0 } else { 0.0 }]).collect();
            line.impulse =
                deconvolve(|t| line.kernel.weight(t), delta, None).into_iter().map(|r| r[0]).collect();
        }
        line
    }

    /// The coarser spline's coefficients, its knots `stretch` apart from the outer edge on.
    fn solve_lattice(&mut self) {
        if !self.least_squares {
            return;
        }
        let a = self.stretch;
        let count = (self.n as f64 / a).ceil() as i64;
        let margin = if self.open() { 0 } else { REACH };
        let data = (-margin..count + margin).map(|m| self.weights(m as f64 * a + 0.5 * (a - 1.0))).collect();
        let open = self.open().then_some((0, count as usize));
        // Degree n has n + 1 taps; its Gram matrix is the spline of degree 2 n + 1 at whole numbers.
        let gram = crate::kernel::Pieces::b_spline(2 * self.kernel.taps().unwrap_or(1) - 1);
        self.lattice = deconvolve(|t| gram.value(t), data, open);
    }

    fn open(&self) -> bool {
        self.extension == Extension::Open
    }

    /// The extended sample k.
    fn extended(&self, k: i64) -> Row {
        let mut row = vec![0.0; self.n + 1];
        match self.extension.place(k, self.n) {
            Place::Sample(i) => row[i] = 1.0,
            Place::Constant(v) => row[self.n] = v,
            Place::Absent => {}
            Place::Turned { index, sign, first, last } => {
                row[index] += sign;
                row[0] += first;
                row[self.n - 1] += last;
            }
        }
        row
    }

    /// Coefficient k where there is a prefilter, else the extended sample.
    fn coefficient(&self, k: i64) -> Row {
        match self.coefficients.get((k + self.reach) as usize) {
            Some(row) => row.clone(),
            None => self.extended(k),
        }
    }

    /// `sum_k h(x - k) v(k) / sum_k h(x - k)`; for an open line over what is there.
    fn weighed(&self, x: f64, radius: f64, h: impl Fn(f64) -> f64, v: impl Fn(i64) -> Row) -> Row {
        let mut out = vec![0.0; self.n + 1];
        let (mut sum, mut moduli, mut total) = (0.0f64, 0.0, 0.0);
        for k in (x - radius).ceil() as i64..=(x + radius).floor() as i64 {
            let w = h(x - k as f64);
            total += w;
            if self.open() && !(0..self.n as i64).contains(&k) {
                continue;
            }
            if w != 0.0 {
                sum += w;
                moduli += w.abs();
                out.iter_mut().zip(v(k)).for_each(|(o, v)| *o += w * v);
            }
        }
        if self.open() && (moduli < 1e-3 * total || sum.abs() < 0.1 * moduli) {
            return vec![f64::NAN; self.n + 1];
        }
        out.iter_mut().for_each(|o| *o /= sum);
        out
    }

    /// Weights at `x` before any prefilter on the output's line.
    fn weights(&self, x: f64) -> Row {
        match self.kernel.shape() {
            Shape::Sinc => self.cosines(x),
            Shape::Polynomial => {
                let nodes = 0..self.n;
                let basis = |k: usize| {
                    nodes
                        .clone()
                        .filter(|j| *j != k)
                        .map(|j| (x - j as f64) / (k as f64 - j as f64))
                        .product()
                };
                nodes.clone().map(basis).chain([0.0]).collect()
            }
            Shape::Area => {
                let (a, b) = (x - self.cell / 2.0, x + self.cell / 2.0);
                let h = |t: f64| {
                    let k = x - t;
                    ((k + 0.5).min(b) - (k - 0.5).max(a)).max(0.0)
                };
                self.weighed(x, self.cell / 2.0 + 0.5, h, |k| self.extended(k))
            }
            _ if self.least_squares => {
                let half = self.kernel.radius();
                let g = |t: f64| self.projection(t);
                self.weighed(x, half * (1.0 + self.stretch), g, |k| self.coefficient(k))
            }
            _ if self.stretch > 1.0 => {
                let a = self.stretch;
                self.weighed(x, self.kernel.radius() * a, |t| self.kernel.weight(t / a), |k| self.extended(k))
            }
            _ => self.weighed(x, self.kernel.radius(), |t| self.kernel.weight(t), |k| self.coefficient(k)),
        }
    }

    /// Weights at a free position (turned maps): the cardinal kernel stretched, on samples, where the map shrinks.
    fn free(&self, x: f64, any_wide: bool) -> Row {
        let prefiltered = self.kernel.is_prefiltered();
        if self.least_squares {
            let a = self.stretch;
            let (node, first) = ((x - 0.5 * (a - 1.0)) / a, if self.open() { 0 } else { -REACH });
            let mut out = vec![0.0; self.n + 1];
            let mut sum = 0.0;
            for (c, m) in self.lattice.iter().zip(first..) {
                let w = self.kernel.weight(node - m as f64);
                sum += w;
                out.iter_mut().zip(c).for_each(|(o, c)| *o += w * c);
            }
            out.iter_mut().for_each(|o| *o /= sum);
            return out;
        }
        let projecting = self.projecting;
        if !any_wide || !prefiltered || projecting {
            return self.weights(x);
        }
        let a = self.stretch;
        let cardinal = |t: f64| {
            self.impulse
                .iter()
                .enumerate()
                .map(|(j, q)| q * self.kernel.weight(t / a - (j as f64 - REACH as f64)))
                .sum::<f64>()
        };
        self.weighed(x, (REACH as f64 * 0.7) * a, cardinal, |k| self.extended(k))
    }

    /// `(1/a) int phi(u) phi((u - t) / a) du` between the knots of both, by Gauss's five-point rule on thin slices.
    fn projection(&self, t: f64) -> f64 {
        let (a, half) = (self.stretch, self.kernel.radius());
        let mut knots: Vec<f64> = (0..=(2.0 * half) as i64).map(|k| k as f64 - half).collect();
        knots.extend((0..=(2.0 * half) as i64).map(|k| t + a * (k as f64 - half)));
        knots.sort_by(f64::total_cmp);
        const NODES: [(f64, f64); 5] = [
            (0.0, 128.0 / 225.0),
            (0.538_469_310_105_683_1, 0.478_628_670_499_366_47),
            (-0.538_469_310_105_683_1, 0.478_628_670_499_366_47),
            (0.906_179_845_938_664, 0.236_926_885_056_189_08),
            (-0.906_179_845_938_664, 0.236_926_885_056_189_08),
        ];
        let mut sum = 0.0;
        const SLICES: usize = 8;
        for w in knots.windows(2) {
            let h = 0.5 * (w[1] - w[0]) / SLICES as f64;
            for slice in 0..SLICES {
                let middle = w[0] + h * (2 * slice + 1) as f64;
                for (x, weight) in NODES {
                    let u = middle + h * x;
                    sum += h * weight * self.kernel.weight(u) * self.kernel.weight((u - t) / a);
                }
            }
        }
        sum / a
    }

    /// The trigonometric interpolant by its sum of cosines.
    fn cosines(&self, x: f64) -> Row {
        let mirrored = self.extension != Extension::Periodic;
        let n = self.n;
        let limit = |k: usize, period: usize| {
            self.stretch <= 1.0 || (k as f64) < period as f64 / (2.0 * self.stretch) - 1e-9
        };
        let weight = |j: usize| -> f64 {
            if mirrored {
                // DCT-II and its inverse at x.
                (0..n)
                    .filter(|k| *k == 0 || limit(*k, 2 * n))
                    .map(|k| {
                        let scale = if k == 0 { 1.0 } else { 2.0 } / n as f64;
                        let angle = PI * k as f64 / n as f64;
                        scale * (angle * (j as f64 + 0.5)).cos() * (angle * (x + 0.5)).cos()
                    })
                    .sum()
            } else {
                (0..=n / 2)
                    .filter(|k| *k == 0 || limit(*k, n))
                    .map(|k| {
                        let scale = if k == 0 || 2 * k == n { 1.0 } else { 2.0 } / n as f64;
                        let angle = 2.0 * PI * k as f64 / n as f64;
                        // The Nyquist term keeps its cosine part only, so that real stays real.
                        if 2 * k == n {
                            scale * (PI * j as f64).cos() * (PI * x).cos()
                        } else {
                            scale * (angle * (x - j as f64)).cos()
                        }
                    })
                    .sum()
            }
        };
        (0..n).map(weight).chain([0.0]).collect()
    }
}

/// The rows of an axis: output o looks at `o * step + offset`.
fn lines(line: &Line, target: usize, (step, offset): (f64, f64), rules: &Rules) -> Vec<Row> {
    let at = |o: i64| line.weights(o as f64 * step + offset);
    let whole = step.abs() == 1.0 && offset.fract() == 0.0;
    if whole && rules.kernel.is_interpolating() {
        return (0..target as i64)
            .map(|o| {
                let k = (o as f64 * step + offset) as i64;
                let there = !line.open() || (0..line.n as i64).contains(&k);
                if there { line.extended(k) } else { vec![f64::NAN; line.n + 1] }
            })
            .collect();
    }
    let filters_output = line.least_squares || (line.stretch > 1.0 && rules.kernel.is_prefiltered());
    if !filters_output {
        return (0..target as i64).map(at).collect();
    }
    let margin = if line.open() { 0 } else { REACH };
    let data: Vec<Row> = (-margin..target as i64 + margin).map(at).collect();
    let open = line.open().then_some((0, target));
    if !line.least_squares {
        let mut solved = deconvolve(|t| line.kernel.weight(t), data, open);
        return solved.drain(margin as usize..margin as usize + target).collect();
    }
    let n = (2.0 * line.kernel.radius()) as usize - 1;
    let gram = crate::kernel::Pieces::b_spline(2 * n + 1);
    let d = deconvolve(|t| gram.value(t), data, open);
    (0..target as i64)
        .map(|o| {
            let mut row = vec![0.0; line.n + 1];
            let mut sum = 0.0;
            for m in o - n as i64..=o + n as i64 {
                let w = line.kernel.weight((o - m) as f64);
                if let Some(c) = usize::try_from(m + margin).ok().and_then(|m| d.get(m)) {
                    row.iter_mut().zip(c).for_each(|(r, c)| *r += w * c);
                    sum += w;
                }
            }
            row.iter_mut().for_each(|r| *r /= sum);
            row
        })
        .collect()
}

/// Solves `sum_l phi(k - l) c[l] = data[k]` by elimination with pivoting. For an open line, given as (index of the first
/// datum, length), only the coefficients on the line exist and each equation is divided by its sum.
fn deconvolve(phi: impl Fn(f64) -> f64, data: Vec<Row>, open: Option<(i64, usize)>) -> Vec<Row> {
    let len = data.len();
    let exists = |k: usize| open.is_none_or(|(first, n)| (0..n as i64).contains(&(k as i64 + first)));
    let mut a: Vec<Vec<f64>> = (0..len)
        .map(|k| {
            let mut row: Vec<f64> = (0..len)
                .map(|l| match (exists(k), exists(l)) {
                    (true, true) => phi(k as f64 - l as f64),
                    (false, _) if k == l => 1.0,
                    _ => 0.0,
                })
                .collect();
            if open.is_some() && exists(k) {
                let sum: f64 = row.iter().sum();
                row.iter_mut().for_each(|v| *v /= sum);
            }
            row
        })
        .collect();
    let mut b = data;
    for i in 0..len {
        let pivot = (i..len).max_by(|p, q| a[*p][i].abs().total_cmp(&a[*q][i].abs())).unwrap_or(i);
        a.swap(i, pivot);
        b.swap(i, pivot);
        for k in i + 1..len {
            let f = a[k][i] / a[i][i];
            if f != 0.0 {
                let (top, bottom) = a.split_at_mut(k);
                bottom[0][i..].iter_mut().zip(&top[i][i..]).for_each(|(v, t)| *v -= f * t);
                let (top, bottom) = b.split_at_mut(k);
                bottom[0].iter_mut().zip(&top[i]).for_each(|(v, t)| *v -= f * t);
            }
        }
    }
    for i in (0..len).rev() {
        for k in i + 1..len {
            let f = a[i][k];
            if f != 0.0 {
                let (top, bottom) = b.split_at_mut(k);
                top[i].iter_mut().zip(&bottom[0]).for_each(|(v, t)| *v -= f * t);
            }
        }
        let d = a[i][i];
        b[i].iter_mut().for_each(|v| *v /= d);
    }
    b
}
