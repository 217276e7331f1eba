//! Weights that keep totals, along one axis: differences of the interpolated cumulative sum.
//!
//! Let F be the cumulative sum of the cells at their edges 0..=N, mirrored cells beyond (so that F is point-symmetric
//! about both ends). A new cell between the edges a and b gets F(b) - F(a), where F between the old edges is
//! interpolated with the kernel. Neighbours share an edge, so the sum telescopes to F(N) - F(0): the total, whatever
//! the kernel. The linear kernel gives exact area overlap, the B-spline of degree n the conservative histospline of degree n - 1.
//!
//! On the cells themselves (or on their prefiltered coefficients, since differences and prefilter commute) the weight of
//! cell i is the sum over the edges e > i of w_e(b) - w_e(a), w the kernel's weights on the edges.

use super::weights::barycentric;
use crate::kernel::windowed::dirichlet;
use crate::kernel::{Kernel, Shape};

/// Gives the weights of new cells on a line of old ones.
#[derive(Clone, Debug)]
pub struct Conserving {
    kernel: Kernel,
    /// Number of cells.
    n: usize,
    /// Barycentric weights of the edges, for the one polynomial.
    nodes: Vec<f64>,
}

impl Conserving {
    /// For a line of `n` cells.
    pub fn new(kernel: &Kernel, n: usize) -> Self {
        let nodes = if *kernel.shape() == Shape::Polynomial { barycentric(n + 1) } else { Vec::new() };
        Conserving { kernel: kernel.clone(), n, nodes }
    }

    /// Whether weights fall on the whole line, wherever the cell.
    pub fn is_whole_line(&self) -> bool {
        matches!(self.kernel.shape(), Shape::Sinc | Shape::Polynomial)
    }

    /// Cells beyond a new cell's edges that may get weight.
    pub fn radius(&self) -> f64 {
        if self.is_whole_line() { self.n as f64 } else { self.kernel.radius().max(1.0) }
    }

    /// The weights of the new cell between the edges `low` and `high` (in cells from the line's outer edge) on the
    /// (extended) cells `first..first + out.len()`; they sum to its length. Empty for a cell without length.
    pub fn cell(&self, low: f64, high: f64, out: &mut Vec<f64>) -> i64 {
        out.clear();
        if !(high > low) {
            return 0;
        }
        let (mut a, mut b) = (Shares::default(), Shares::default());
        self.shares(low, &mut a);
        self.shares(high, &mut b);
        a.up_to(&b, out)
    }

    /// How much of each cell lies before the edge `at`, as the kernel sees it.
    pub fn shares(&self, at: f64, out: &mut Shares) {
        let w = &mut out.shares;
        w.clear();
        match self.kernel.shape() {
            Shape::Sinc => {
                self.sinc_shares(at, w);
                out.first = 0;
            }
            Shape::Polynomial => {
                super::weights::whole_line_polynomial(at, &self.nodes, w);
                w.remove(0);
                tails(w);
                out.first = 0;
            }
            _ => {
                let mut first = self.kernel.weights_at(at, w);
                if !self.kernel.is_prefiltered() {
                    first = centre(at, first, w);
                }
                // Cell i ends at edge i + 1: its share is what stands on that edge and those after it.
                tails(w);
                out.first = first - 1;
            }
        }
    }

    /// The trigonometric interpolation of the cumulative sum less its slope, which is odd and of period 2 N.
    fn sinc_shares(&self, at: f64, out: &mut Vec<f64>) {
        let n = self.n as f64;
        out.extend((1..self.n).map(|e| {
            let e = e as f64;
            dirichlet(at - e, 2.0 * n, self.n - 1, false) - dirichlet(at + e, 2.0 * n, self.n - 1, false)
        }));
        let slope: f64 = out.iter().zip(1..).map(|(w, e)| w * f64::from(e) / n).sum();
        tails(out);
        out.resize(self.n, 0.0);
        out.iter_mut().for_each(|s| *s += at / n - slope);
    }
}

/// Shares of the cells of a line that lie before an edge: of cells before the first all, of those after the last none.
#[derive(Clone, Debug, Default)]
pub struct Shares {
    /// The first cell that is listed.
    pub first: i64,
    shares: Vec<f64>,
}

impl Shares {
    fn of(&self, cell: i64) -> f64 {
        match usize::try_from(cell - self.first) {
            Err(_) => 1.0,
            Ok(k) => self.shares.get(k).copied().unwrap_or(0.0),
        }
    }

    /// The weights of the cell between this edge and the edge `end`; returns the first cell that gets one.
    pub fn up_to(&self, end: &Shares, out: &mut Vec<f64>) -> i64 {
        let last = |s: &Shares| s.first + s.shares.len() as i64;
        let (first, last) = (self.first.min(end.first), last(self).max(last(end)));
        out.clear();
        out.extend((first..last).map(|i| end.of(i) - self.of(i)));
        first
    }
}

/// Turns each element into the sum of itself and all after it.
fn tails(w: &mut [f64]) {
    for k in (1..w.len()).rev() {
        w[k - 1] += w[k];
    }
}

/// Sets the first moment of the weights about `at` to zero, from tap floor(at) to the next, so that flat totals stay flat
/// under kernels that do not reproduce a ramp.
fn centre(at: f64, mut first: i64, w: &mut Vec<f64>) -> i64 {
    let moment: f64 = w.iter().zip(first..).map(|(w, k)| w * (at - k as f64)).sum();
    let tap = at.floor() as i64;
    while first > tap {
        w.insert(0, 0.0);
        first -= 1;
    }
    while first + (w.len() as i64) < tap + 2 {
        w.push(0.0);
    }
    w[(tap - first) as usize] -= moment;
    w[(tap + 1 - first) as usize] += moment;
    first
}
