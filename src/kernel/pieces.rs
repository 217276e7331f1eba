//! Piecewise-polynomial kernels as one table: for each tap, a polynomial in the offset within a sample interval.
//!
//! A kernel of `taps` taps at position `x` uses samples `first..first + taps`. With an even number of taps,
//! `x = i + s`, `i = floor(x)`, and the first sample is `i - taps/2 + 1`. With an odd number the nearest sample
//! `i = floor(x + 1/2)` is in the middle, `s = x - i + 1/2`, and the first is `i - (taps - 1)/2`. In both cases `s` lies in
//! [0, 1) and the weight of tap m is a polynomial in `s`: row m of the table, lowest power first.

/// A kernel as `taps` polynomials of one degree.
#[derive(Clone, Debug, PartialEq)]
pub struct Pieces {
    /// Number of taps (the kernel's support).
    pub taps: usize,
    /// Polynomial degree of every piece.
    pub degree: usize,
    /// `taps` rows of `degree + 1` coefficients, lowest power first.
    pub table: Vec<f64>,
    /// The kernel is centred at this place instead of 0 (shifted-linear).
    pub centre: f64,
}

/// Splits a position into the first of `taps` samples and the offset in [0, 1).
///
/// For x a hair below a whole number, `x - floor(x)` rounds to exactly 1; the next interval with offset 0 is meant.
#[inline(always)]
pub fn split(x: f64, taps: usize) -> (i64, f64) {
    let i = x.floor();
    let mut s = x - i;
    let mut i = i as i64;
    if s >= 1.0 {
        i += 1;
        s = 0.0;
    }
    if taps.is_multiple_of(2) {
        (i - taps as i64 / 2 + 1, s)
    } else if s >= 0.5 {
        // `floor(x + 0.5)` would be wrong for 0.49999999999999994; comparing the offset is exact.
        (i + 1 - (taps as i64 - 1) / 2, s - 0.5)
    } else {
        (i - (taps as i64 - 1) / 2, s + 0.5)
    }
}

impl Pieces {
    /// From integer numerators over one denominator, so that every coefficient is rounded once.
    fn from_integers(rows: &[Vec<i128>], denominator: i128) -> Self {
        let degree = rows.iter().map(Vec::len).max().unwrap_or(1).max(1) - 1;
        let mut table = vec![0.0; rows.len() * (degree + 1)];
        for (m, row) in rows.iter().enumerate() {
            for (d, &c) in row.iter().enumerate() {
                table[m * (degree + 1) + d] = c as f64 / denominator as f64;
            }
        }
        Pieces { taps: rows.len(), degree, table, centre: 0.0 }
    }

    /// From the pieces of an even kernel on |t| in [0, 1), [1, 2), ...: numerators, lowest power first.
    pub fn from_even(pieces: &[&[i64]], denominator: i64) -> Self {
        let half = pieces.len();
        let rows: Vec<Vec<i128>> = (0..2 * half)
            .map(|m| {
                // t = s + j on the interval [j, j + 1); an even kernel at negative t is its piece at -t.
                let j = half as i128 - 1 - m as i128;
                let (piece, sign) =
                    if j >= 0 { (pieces[j as usize], 1) } else { (pieces[(-j - 1) as usize], -1) };
                let wide: Vec<i128> = piece.iter().map(|&c| i128::from(c)).collect();
                compose(&wide, sign * j, sign)
            })
            .collect();
        Pieces::from_integers(&rows, i128::from(denominator))
    }

    /// The B-spline of degree n: `(1/n!) sum_j (-1)^j C(n+1, j) (u - j)_+^n` on [0, n + 1].
    /// Schoenberg 1946; Unser, Aldroubi and Eden 1993, IEEE Trans. Signal Process. 41(2):821-848.
    pub fn b_spline(n: usize) -> Self {
        let (rows, factorial) = b_spline_integers(n);
        Pieces::from_integers(&rows, factorial)
    }

    /// `beta^n + sum_m p_m D^(2m) beta^n`, with each `p_m` given as 1 over a whole number.
    /// Blu, Thevenaz and Unser 2001, IEEE Trans. Image Process. 10(7):1069-1080.
    pub fn o_moms(n: usize, inverse_weights: &[i128]) -> Self {
        let (rows, factorial) = b_spline_integers(n);
        let common: i128 = inverse_weights.iter().product();
        let rows: Vec<Vec<i128>> = rows
            .iter()
            .map(|row| {
                let mut sum: Vec<i128> = row.iter().map(|c| c * common).collect();
                let mut derivative = row.clone();
                for w in inverse_weights {
                    derivative = differentiate(&differentiate(&derivative));
                    for (d, c) in derivative.iter().enumerate() {
                        sum[d] += c * (common / w);
                    }
                }
                sum
            })
            .collect();
        Pieces::from_integers(&rows, factorial * common)
    }

    /// Lagrange's polynomial through the `points` samples around the position.
    pub fn lagrange(points: usize) -> Self {
        // Nodes at whole numbers; for an odd number the offset runs from -1/2, so lengths are doubled to stay whole.
        let first = if points.is_multiple_of(2) { 1 - points as i128 / 2 } else { -(points as i128 - 1) / 2 };
        let nodes: Vec<i128> = (0..points as i128).map(|m| first + m).collect();
        let lead = if points.is_multiple_of(2) { 0 } else { -1 };
        let mut rows = Vec::with_capacity(points);
        let mut denominators = Vec::with_capacity(points);
        for &k in &nodes {
            // prod (2 x - 2 j) / (2 k - 2 j) with 2 x = 2 s + lead.
            let mut poly = vec![1i128];
            let mut denominator = 1i128;
            for &j in nodes.iter().filter(|&&j| j != k) {
                let mut next = vec![0i128; poly.len() + 1];
                for (d, c) in poly.iter().enumerate() {
                    next[d] += c * (lead - 2 * j);
                    next[d + 1] += c * 2;
                }
                poly = next;
                denominator *= 2 * (k - j);
            }
            rows.push(poly);
            denominators.push(denominator);
        }
        let mut pieces = Pieces::from_integers(&rows, 1);
        for (m, d) in denominators.iter().enumerate() {
            for (c, &exact) in pieces.table[m * points..(m + 1) * points].iter_mut().zip(&rows[m]) {
                *c = exact as f64 / *d as f64;
            }
        }
        pieces
    }

    /// The two-parameter cubic of Mitchell and Netravali 1988, Comput. Graph. 22(4):221-228; (0, -a) is the cubic of
    /// Keys 1981, IEEE Trans. Acoust. Speech Signal Process. 29(6):1153-1160.
    pub fn bc_spline(b: f64, c: f64) -> Self {
        let inner = [
            (6.0 - 2.0 * b) / 6.0,
            0.0,
            (-18.0 + 12.0 * b + 6.0 * c) / 6.0,
            (12.0 - 9.0 * b - 6.0 * c) / 6.0,
        ];
        let outer = [
            (8.0 * b + 24.0 * c) / 6.0,
            (-12.0 * b - 48.0 * c) / 6.0,
            (6.0 * b + 30.0 * c) / 6.0,
            (-b - 6.0 * c) / 6.0,
        ];
        let mut table = Vec::with_capacity(16);
        for (piece, at, sign) in
            [(outer, 1.0, 1.0), (inner, 0.0, 1.0), (inner, 1.0, -1.0), (outer, 2.0, -1.0)]
        {
            // p(at + sign s), expanded.
            let [p0, p1, p2, p3] = piece;
            table.push(p0 + at * (p1 + at * (p2 + at * p3)));
            table.push(sign * (p1 + at * (2.0 * p2 + at * 3.0 * p3)));
            table.push(p2 + 3.0 * at * p3);
            table.push(sign * p3);
        }
        // The outermost weights vanish at the samples; rounding must not leave 1e-17 there.
        if b == 0.0 {
            table[0] = 0.0;
            table[8] = 0.0;
            table[12] = 0.0;
        }
        Pieces { taps: 4, degree: 3, table, centre: 0.0 }
    }

    /// `sum_k q[k] phi(t - k)` for an odd number of `q` about 0.
    pub fn convolved(&self, q: &[f64]) -> Self {
        let (reach, width) = (q.len() / 2, self.degree + 1);
        let taps = self.taps + 2 * reach;
        let mut table = vec![0.0; taps * width];
        for (m, row) in table.chunks_exact_mut(width).enumerate() {
            for (k, q) in q.iter().enumerate() {
                // phi(t - k) seen from tap m of the wider kernel is its own tap m + k - 2 reach, with k counted from -reach.
                let Some(own) = (m + k).checked_sub(2 * reach).filter(|own| *own < self.taps) else {
                    continue;
                };
                let piece = &self.table[own * width..(own + 1) * width];
                row.iter_mut().zip(piece).for_each(|(sum, c)| *sum += q * c);
            }
        }
        Pieces { taps, table, ..self.clone() }
    }

    /// The weight of tap `m` at offset `s`.
    #[inline(always)]
    pub fn weight(&self, m: usize, s: f64) -> f64 {
        let row = &self.table[m * (self.degree + 1)..(m + 1) * (self.degree + 1)];
        row.iter().rev().fold(0.0, |sum, &c| sum * s + c)
    }

    /// The kernel at `t` = position minus sample, right-continuous at jumps.
    pub fn value(&self, t: f64) -> f64 {
        let t = t - self.centre;
        let (first, s) = split(t, self.taps);
        // Tap m sits at sample first + m; the one that looks at sample 0 is wanted.
        let m = -first;
        if m < 0 || m >= self.taps as i64 { 0.0 } else { self.weight(m as usize, s) }
    }
}

/// `p(at + sign s)` as a polynomial in `s`.
fn compose(p: &[i128], at: i128, sign: i128) -> Vec<i128> {
    let mut out: Vec<i128> = vec![0; p.len()];
    for &c in p.iter().rev() {
        // out = out * (at + sign s) + c
        for d in (0..out.len()).rev() {
            out[d] = out[d] * at + if d > 0 { out[d - 1] * sign } else { 0 };
        }
        out[0] += c;
    }
    out
}

fn differentiate(p: &[i128]) -> Vec<i128> {
    (1..p.len()).map(|d| p[d] * d as i128).collect()
}

/// Numerators of the B-spline's pieces over n!, in tap order.
fn b_spline_integers(n: usize) -> (Vec<Vec<i128>>, i128) {
    let factorial: i128 = (1..=n as i128).product();
    let mut power = vec![0i128; n + 1];
    power[n] = 1;
    let rows = (0..=n)
        .map(|m| {
            let p = (n - m) as i128;
            let mut sum = vec![0i128; n + 1];
            let mut choose = 1i128;
            for j in 0..=p {
                let sign = if j % 2 == 0 { 1 } else { -1 };
                for (total, c) in sum.iter_mut().zip(compose(&power, p - j, 1)) {
                    *total += sign * choose * c;
                }
                choose = choose * (n as i128 + 1 - j) / (j + 1);
            }
            sum
        })
        .collect();
    (rows, factorial)
}
