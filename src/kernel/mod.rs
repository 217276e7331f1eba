//! Kernels: the 1-D functions that weigh samples, applied along rows, then columns.
//!
//! Most kernels are a table of piecewise polynomials ([`Pieces`]); the others are a sinc under a window or one of three
//! that look at a whole line or a whole cell. A kernel whose samples are first turned into coefficients (a B-spline, say)
//! carries a prefilter: see [`Prefilter`].

mod extension;
mod families;
mod pieces;
mod prefilter;
pub mod windowed;

pub use extension::{Extension, Place};
pub use families::{FAMILIES, Family};
pub use pieces::{Pieces, split};
pub use prefilter::{Prefilter, SEGMENT, WARM_UP, segment_window, segments};

use crate::error::Result;
use serde::{Deserialize, Serialize};
use windowed::Window;

/// What a kernel is made of.
#[derive(Clone, Debug, PartialEq)]
pub enum Shape {
    /// Piecewise polynomials of finite support.
    Pieces(Pieces),
    /// A sinc under a window, `2 * radius` taps, weights normalised to sum 1.
    Windowed {
        /// Half the number of taps.
        radius: usize,
        /// The window, stretched over the radius.
        window: Window,
    },
    /// The periodic sinc through all samples of a line, by the discrete Fourier transform.
    Sinc,
    /// The one polynomial through all samples of a line.
    Polynomial,
    /// Exact overlap of the output cell with input cells.
    Area,
}

/// A kernel, by name.
#[derive(Clone, Debug, PartialEq)]
pub struct Kernel {
    name: String,
    shape: Shape,
    prefiltered: bool,
    order: Option<u32>,
    regularity: Option<i32>,
    /// Interpolating without a prefilter.
    reproduces_samples: bool,
}

impl Kernel {
    /// The kernel of that name, such as `bspline:3`, `keys` or `lanczos:3`.
    ///
    /// # Errors
    /// A usage error that suggests the nearest name, or tells which parameters the kernel takes.
    pub fn parse(name: &str) -> Result<Kernel> {
        families::parse(name)
    }

    /// The full name, with parameters.
    pub fn name(&self) -> &str {
        &self.name
    }

    /// What it is made of.
    pub fn shape(&self) -> &Shape {
        &self.shape
    }

    /// Number of taps along one axis; `None` where it follows the line's length.
    pub fn taps(&self) -> Option<usize> {
        match &self.shape {
            Shape::Pieces(p) => Some(p.taps),
            Shape::Windowed { radius, .. } => Some(2 * radius),
            Shape::Area => Some(2),
            Shape::Sinc | Shape::Polynomial => None,
        }
    }

    /// Approximation order: the error falls as the pixel size to this power, and polynomials below this degree are
    /// reproduced. `None`: faster than any power (the sinc, the polynomial).
    pub fn order(&self) -> Option<u32> {
        self.order
    }

    /// Number of continuous derivatives; -1 where the kernel jumps, `None` for all of them.
    pub fn regularity(&self) -> Option<i32> {
        self.regularity
    }

    /// Whether samples are turned into coefficients first.
    pub fn is_prefiltered(&self) -> bool {
        self.prefiltered
    }

    /// Whether a position on a sample gives that sample back (with the prefilter, if there is one).
    pub fn is_interpolating(&self) -> bool {
        self.prefiltered || self.reproduces_samples
    }

    /// The basis function at `t` = position minus sample, in samples; for a truncated kernel before normalisation.
    /// 0 for the kernels that look at whole lines.
    pub fn weight(&self, t: f64) -> f64 {
        match &self.shape {
            Shape::Pieces(p) => p.value(t),
            Shape::Windowed { radius, window } => {
                let r = *radius as f64;
                if t.abs() >= r { 0.0 } else { windowed::sinc(t) * window.value(t / r) }
            }
            Shape::Area => (1.0 - t.abs()).max(0.0),
            Shape::Sinc => windowed::sinc(t),
            Shape::Polynomial => 0.0,
        }
    }

    /// Half the support in samples, centre offset included; 0 for whole-line kernels.
    pub fn radius(&self) -> f64 {
        match &self.shape {
            Shape::Pieces(p) => p.taps as f64 / 2.0 + p.centre.abs(),
            Shape::Windowed { radius, .. } => *radius as f64,
            Shape::Area => 1.0,
            Shape::Sinc | Shape::Polynomial => 0.0,
        }
    }

    /// The weights at position `x` on the samples (or coefficients) `first..first + out.len()`; sums to 1.
    /// Only for kernels of finite support.
    pub fn weights_at(&self, x: f64, out: &mut Vec<f64>) -> i64 {
        out.clear();
        match &self.shape {
            Shape::Pieces(p) => {
                let (first, s) = split(x - p.centre, p.taps);
                if x.fract() == 0.0 && self.reproduces_samples {
                    // On a sample the weights are 0 and 1 to the bit, whatever rounding the polynomials leave.
                    out.extend((0..p.taps).map(|m| if first + m as i64 == x as i64 { 1.0 } else { 0.0 }));
                } else {
                    out.extend((0..p.taps).map(|m| p.weight(m, s)));
                }
                first
            }
            Shape::Windowed { radius, window } => {
                let taps = 2 * radius;
                let (first, s) = split(x, taps);
                windowed_weights(s, *radius, *window, out);
                first
            }
            Shape::Area => {
                let (first, s) = split(x, 2);
                out.extend([1.0 - s, s]);
                first
            }
            Shape::Sinc | Shape::Polynomial => 0,
        }
    }

    /// The samples phi(-b)..=phi(b) of a prefiltered kernel at whole numbers, with b = `len / 2`.
    pub fn symbol(&self) -> Vec<f64> {
        let reach = self.radius().ceil() as i64;
        let at: Vec<f64> = (-reach..=reach).map(|k| self.weight(k as f64)).collect();
        let keep = (0..=reach as usize)
            .rev()
            .find(|b| at[reach as usize - b] != 0.0 || at[reach as usize + b] != 0.0)
            .unwrap_or(0);
        at[reach as usize - keep..=reach as usize + keep].to_vec()
    }

    /// The poles of the prefilter inside the unit circle, smallest modulus last; empty without prefilter.
    pub fn poles(&self) -> Vec<f64> {
        if self.prefiltered { prefilter::poles(&self.symbol()) } else { Vec::new() }
    }

    /// The largest factor by which the prefilter can amplify along one axis: 1 / B(pi). 1 without prefilter.
    pub fn amplification(&self) -> f64 {
        if !self.prefiltered {
            return 1.0;
        }
        let symbol = self.symbol();
        let middle = symbol.len() as i64 / 2;
        let alternating: f64 =
            symbol.iter().enumerate().map(|(k, v)| if (k as i64 - middle) % 2 == 0 { *v } else { -v }).sum();
        1.0 / alternating.abs()
    }

    /// The cardinal kernel at `t`: the response to a single sample of 1, prefilter included.
    pub fn cardinal(&self, t: f64) -> f64 {
        if !self.prefiltered {
            return self.weights_sum_normalised(t);
        }
        let (inverse, middle) = self.inverse_symbol();
        let reach = self.radius().ceil() as i64 + 1;
        let near = t.floor() as i64;
        let mut sum = 0.0;
        for k in near - reach..=near + reach {
            let at = k + middle;
            if at >= 0 && (at as usize) < inverse.len() {
                sum += inverse[at as usize] * self.weight(t - k as f64);
            }
        }
        sum
    }

    /// The cardinal kernel of a prefiltered kernel as a table of its own: the basis weighed by the prefilter's impulse response,
    /// which is cut where it falls below `cut`. `None` for kernels that are no table.
    pub fn cardinal_pieces(&self, cut: f64) -> Option<Pieces> {
        let Shape::Pieces(basis) = &self.shape else { return None };
        let (inverse, middle) = self.inverse_symbol();
        let middle = middle as usize;
        let reach = (0..=middle)
            .rev()
            .find(|k| inverse[middle + k].abs() > cut || inverse[middle - k].abs() > cut)
            .unwrap_or(0);
        Some(basis.convolved(&inverse[middle - reach..=middle + reach]))
    }

    /// The impulse response of the prefilter, as values around the index `middle`, down to rounding.
    pub fn inverse_symbol(&self) -> (Vec<f64>, i64) {
        let prefilter = Prefilter::<f64>::new(&self.symbol(), 2 * WARM_UP + 1);
        let mut line = vec![0.0; 2 * WARM_UP + 1];
        line[WARM_UP] = 1.0;
        prefilter.solve(&mut line, 1);
        (line, WARM_UP as i64)
    }

    fn weights_sum_normalised(&self, t: f64) -> f64 {
        let mut weights = Vec::new();
        let first = self.weights_at(t, &mut weights);
        usize::try_from(-first).ok().and_then(|m| weights.get(m)).copied().unwrap_or(0.0)
    }
}

/// All taps of a windowed sinc at offset `s`, divided by their sum.
fn windowed_weights(s: f64, radius: usize, window: Window, out: &mut Vec<f64>) {
    let r = radius as f64;
    out.extend((0..2 * radius).map(|m| {
        let t = s + (radius as f64 - 1.0 - m as f64);
        if t.abs() >= r { 0.0 } else { windowed::sinc(t) * window.value(t / r) }
    }));
    let sum: f64 = out.iter().sum();
    for w in out.iter_mut() {
        *w /= sum;
    }
}

impl Default for Kernel {
    /// `bspline:3`.
    fn default() -> Self {
        Kernel {
            name: "bspline:3".into(),
            shape: Shape::Pieces(Pieces::b_spline(3)),
            prefiltered: true,
            order: Some(4),
            regularity: Some(2),
            reproduces_samples: false,
        }
    }
}

impl std::fmt::Display for Kernel {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str(&self.name)
    }
}

impl std::str::FromStr for Kernel {
    type Err = crate::error::Error;
    fn from_str(s: &str) -> Result<Self> {
        Kernel::parse(s)
    }
}

impl Serialize for Kernel {
    fn serialize<S: serde::Serializer>(&self, s: S) -> Result<S::Ok, S::Error> {
        s.serialize_str(&self.name)
    }
}

impl<'de> Deserialize<'de> for Kernel {
    fn deserialize<D: serde::Deserializer<'de>>(d: D) -> Result<Self, D::Error> {
        let name = String::deserialize(d)?;
        Kernel::parse(&name).map_err(serde::de::Error::custom)
    }
}
