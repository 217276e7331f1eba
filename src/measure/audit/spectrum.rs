//! Spectra of two rasters over the same patches: what one kept of the other's detail, and what it shows beside it.
//!
//! Powers and cross-powers are averaged over patches, each under a Blackman-Harris window (Harris 1978, Proc. IEEE
//! 66(1):51-83), whose leakage of -92 dB leaves steep spectra alone. The transfer is the cross-power over BEFORE's
//! power: noise and aliasing that have nothing to do with BEFORE at that frequency average out (Bendat and Piersol,
//! Random Data, 4th ed. 2010, section 6.1).

use super::curve::{Curve, Ring};
use super::shift::transform;
use crate::map::Map;
use ndarray::Array2;
use rustfft::num_complex::Complex64;
use rustfft::{Fft, FftPlanner};
use serde::Serialize;
use std::f64::consts::PI;
use std::sync::Arc;

/// What is known of how BEFORE was brought onto AFTER's grid: a cardinal spline of this degree, stretched where pixels grow.
#[derive(Clone, Debug, PartialEq)]
pub struct Known {
    /// The B-spline's values at whole numbers, phi(-b)..=phi(b).
    pub symbol: Vec<f64>,
    /// Its degree.
    pub degree: i32,
    /// Stretch along the input's rows and columns, at least 1.
    pub stretch: (f64, f64),
    /// Sub-pixel phase along rows and columns, where it is the same for all pixels.
    pub phase: (Option<f64>, Option<f64>),
}

impl Known {
    /// The transfer at a frequency, cycles per input pixel.
    fn transfer(&self, f: (f64, f64)) -> Complex64 {
        self.axis(f.0, self.stretch.0, self.phase.0) * self.axis(f.1, self.stretch.1, self.phase.1)
    }

    fn axis(&self, f: f64, stretch: f64, phase: Option<f64>) -> Complex64 {
        let x = f * stretch;
        let continuous = |x: f64| sinc(x).powi(self.degree + 1);
        let middle = self.symbol.len() as f64 / 2.0 - 0.5;
        let discrete: f64 =
            self.symbol.iter().enumerate().map(|(k, v)| v * (2.0 * PI * x * (k as f64 - middle)).cos()).sum();
        let sum = match phase.filter(|_| stretch == 1.0) {
            None => Complex64::new(continuous(x), 0.0),
            // All pixels look with one phase: the images of the spectrum fall onto it.
            Some(s) => (-4..=4)
                .map(|k| {
                    Complex64::from_polar(1.0, 2.0 * PI * f64::from(k) * s) * continuous(x + f64::from(k))
                })
                .sum(),
        };
        sum / discrete
    }
}

fn sinc(x: f64) -> f64 {
    if x == 0.0 { 1.0 } else { (PI * x).sin() / (PI * x) }
}

/// Powers and cross-powers of AFTER (a), BEFORE (b) and BEFORE without protection against aliasing (u).
pub struct Spectra {
    size: (usize, usize),
    window: (Vec<f64>, Vec<f64>),
    fft: (Arc<dyn Fft<f64>>, Arc<dyn Fft<f64>>),
    /// From cycles per pixel of AFTER to cycles per input pixel.
    to_input: [[f64; 2]; 2],
    power: [Array2<f64>; 3],
    /// a conj(b), a conj(u), b conj(u).
    cross: [Array2<Complex64>; 3],
    patches: usize,
}

/// What AFTER shows that BEFORE's content at that frequency does not explain; shares of AFTER's detail (without the mean).
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Aliasing {
    /// Share of AFTER's power that is content from above AFTER's Nyquist frequency, folded down; null where pixels do not grow.
    pub folded_share: Option<f64>,
    /// The same if nothing had been done against aliasing.
    pub unprotected_share: Option<f64>,
    /// Amplitude of the folded content as a fraction of what an unprotected reduction folds: 0 protected, 1 not at all.
    pub folded_fraction: Option<f64>,
    /// Share of AFTER's power that is neither BEFORE's content nor folded: noise, rounding, artefacts of the kernel.
    pub other_share: f64,
}

impl Spectra {
    /// For patches of `size` pixels of AFTER; `back` leads to BEFORE's positions and is taken as affine.
    ///
    /// # Errors
    /// When the map has no inverse.
    pub fn new(size: (usize, usize), back: &Map) -> crate::error::Result<Self> {
        let j = back.jacobian(0.0, 0.0);
        let inverse = Map::affine([[j[0][0], j[0][1], 0.0], [j[1][0], j[1][1], 0.0]]).invert()?;
        let k = inverse.matrix;
        let mut planner = FftPlanner::new();
        let window = |n: usize| -> Vec<f64> {
            (0..n)
                .map(|i| {
                    let t = 2.0 * PI * (i as f64 + 0.5) / n as f64;
                    0.35875 - 0.48829 * t.cos() + 0.14128 * (2.0 * t).cos() - 0.01168 * (3.0 * t).cos()
                })
                .collect()
        };
        Ok(Spectra {
            size,
            window: (window(size.0), window(size.1)),
            fft: (planner.plan_fft_forward(size.0), planner.plan_fft_forward(size.1)),
            // A wave has the same phase in both: f_in . x = f_out . (K x), so f_in = K^T f_out.
            to_input: [[k[0][0], k[1][0]], [k[0][1], k[1][1]]],
            power: std::array::from_fn(|_| Array2::zeros(size)),
            cross: std::array::from_fn(|_| Array2::zeros(size)),
            patches: 0,
        })
    }

    /// The transform of a patch: its best plane taken off, windowed.
    pub fn transform(&self, patch: &Array2<f64>) -> Array2<Complex64> {
        let (h, w) = self.size;
        let (mr, mc) = ((h as f64 - 1.0) / 2.0, (w as f64 - 1.0) / 2.0);
        let n = (h * w) as f64;
        let (mut mean, mut down, mut right) = (0.0, 0.0, 0.0);
        for ((r, c), v) in patch.indexed_iter() {
            mean += v;
            down += v * (r as f64 - mr);
            right += v * (c as f64 - mc);
        }
        let variance = |n: usize| ((n * n) as f64 - 1.0) / 12.0;
        mean /= n;
        down /= (n * variance(h)).max(f64::MIN_POSITIVE);
        right /= (n * variance(w)).max(f64::MIN_POSITIVE);
        let mut out = Array2::from_shape_fn((h, w), |(r, c)| {
            let plane = mean + down * (r as f64 - mr) + right * (c as f64 - mc);
            Complex64::new((patch[(r, c)] - plane) * self.window.0[r] * self.window.1[c], 0.0)
        });
        transform(&mut out, &self.fft);
        out
    }

    /// Adds a patch: transforms of AFTER and BEFORE, and of BEFORE without protection where pixels grow. AFTER's content
    /// lies further down and right by `shift` pixels of AFTER, which is undone.
    pub fn add(
        &mut self,
        mut after: Array2<Complex64>,
        before: &Array2<Complex64>,
        unprotected: Option<&Array2<Complex64>>,
        shift: (f64, f64),
    ) {
        for ((r, c), v) in after.indexed_iter_mut() {
            let f = self.frequency(r, c);
            *v *= Complex64::from_polar(1.0, 2.0 * PI * (f.0 * shift.0 + f.1 * shift.1));
        }
        let unprotected = unprotected.unwrap_or(before);
        let three = [&after, before, unprotected];
        for (power, s) in self.power.iter_mut().zip(three) {
            power.zip_mut_with(s, |p, v| *p += v.norm_sqr());
        }
        for (cross, (a, b)) in self.cross.iter_mut().zip([(0, 1), (0, 2), (1, 2)]) {
            for (p, (x, y)) in cross.iter_mut().zip(three[a].iter().zip(three[b])) {
                *p += x * y.conj();
            }
        }
        self.patches += 1;
    }

    /// Patches added so far.
    pub fn patches(&self) -> usize {
        self.patches
    }

    /// Cycles per pixel of AFTER of a bin.
    fn frequency(&self, r: usize, c: usize) -> (f64, f64) {
        let signed = |i: usize, n: usize| (if 2 * i > n { i as f64 - n as f64 } else { i as f64 }) / n as f64;
        (signed(r, self.size.0), signed(c, self.size.1))
    }

    fn input_frequency(&self, r: usize, c: usize) -> (f64, f64) {
        let f = self.frequency(r, c);
        let k = &self.to_input;
        (k[0][0] * f.0 + k[0][1] * f.1, k[1][0] * f.0 + k[1][1] * f.1)
    }

    /// Cycles per input pixel between two bins, along the axis where it is coarser.
    fn resolution(&self) -> f64 {
        let (a, b) = (self.input_frequency(1, 0), self.input_frequency(0, 1));
        a.0.hypot(a.1).max(b.0.hypot(b.1))
    }

    /// The transfer over frequency, as rings and along both axes. `nyquist` is the coarser grid's, cycles per input pixel.
    pub fn curve(&self, known: &Known, nyquist: f64) -> Curve {
        let resolution = self.resolution();
        let width = resolution.max(0.0125);
        let limit = 0.96 * nyquist;
        let count = (limit / width).ceil() as usize;
        let mut sums = vec![[Part::default(); 3]; count];
        for ((r, c), before) in self.power[1].indexed_iter() {
            let f = self.input_frequency(r, c);
            let length = f.0.hypot(f.1);
            // The window's main lobe around 0 holds what is left of the mean.
            if length < 3.0 * resolution || length > limit {
                continue;
            }
            let ring = ((length / width) as usize).min(count.saturating_sub(1));
            let part = Part {
                cross: self.cross[0][(r, c)] * known.transfer(f),
                plain: self.cross[0][(r, c)],
                unprotected: self.cross[2][(r, c)].conj() * known.transfer(f),
                before: *before,
                after: self.power[0][(r, c)],
                frequency: length * before,
                bins: 1.0,
            };
            sums[ring][0].add(&part);
            // Within 15 degrees of an axis.
            if f.1.abs() < 0.268 * f.0.abs() {
                sums[ring][1].add(&part);
            } else if f.0.abs() < 0.268 * f.1.abs() {
                sums[ring][2].add(&part);
            }
        }
        let most = sums.iter().map(|s| s[0].before / s[0].bins.max(1.0)).fold(0.0, f64::max);
        let rings = sums
            .iter()
            .filter(|s| s[0].bins > 0.0 && s[0].before > 0.0)
            .map(|s| {
                let all = &s[0];
                let ratio = |p: &Part| (p.before > 0.0).then(|| p.cross.re / p.before);
                let coherence =
                    (all.plain.norm_sqr() / (all.before * all.after).max(f64::MIN_POSITIVE)).min(1.0);
                // Neighbouring bins under the window tell much the same: 4 of them count once, and so do the two halves.
                let independent = (all.bins * self.patches as f64 / 8.0).max(1.0);
                let error =
                    ((1.0 - coherence) * all.after / all.before / (2.0 * independent)).max(0.0).sqrt();
                let power = all.before / all.bins;
                Ring {
                    frequency: all.frequency / all.before,
                    transfer: all.cross.re / all.before,
                    unprotected: all.unprotected.re / all.before,
                    rows: ratio(&s[1]),
                    columns: ratio(&s[2]),
                    error,
                    coherence,
                    before_power: power,
                    after_power: all.after / all.bins,
                    // Below this there is nothing but leakage of the window and rounding.
                    judged: power > 1e-8 * most && error < 0.1,
                }
            })
            .collect();
        Curve { rings, nyquist }
    }

    /// What is folded down and what else AFTER shows; `grows`: whether AFTER's pixels are larger than BEFORE's.
    pub fn aliasing(&self, known: &Known, curve: &Curve, grows: bool) -> Option<Aliasing> {
        let lowest = 3.0 * self.resolution();
        let (mut after, mut left, mut folded, mut common, mut unprotected) = (0.0, 0.0, 0.0, 0.0, 0.0);
        for ((r, c), power) in self.power[0].indexed_iter() {
            let f = self.input_frequency(r, c);
            let length = f.0.hypot(f.1);
            // Beyond the coarser grid's Nyquist frequency there are only images of what lies below.
            if length < lowest || length > curve.nyquist {
                continue;
            }
            let Some(ring) = curve.nearest(length) else { continue };
            let t = known.transfer(f);
            // Along rows and columns the transfer may differ: by the cosine of twice the angle, to first order.
            let turn = (f.0 * f.0 - f.1 * f.1) / (length * length);
            let lean = ring.rows.zip(ring.columns).map_or(0.0, |(r, c)| 0.5 * (r - c) * turn);
            let (k, k0) = ((ring.transfer + lean) / t, ring.unprotected / t);
            let (ab, au, bu) = (self.cross[0][(r, c)], self.cross[1][(r, c)], self.cross[2][(r, c)]);
            let bb = self.power[1][(r, c)];
            after += power;
            left += power - 2.0 * (k.conj() * ab).re + k.norm_sqr() * bb;
            // Content of the unprotected reduction that the protected one does not explain.
            folded += self.power[2][(r, c)] - 2.0 * (k0.conj() * bu.conj()).re + k0.norm_sqr() * bb;
            common += (au - k0.conj() * ab - k * bu + k * k0.conj() * bb).re;
            unprotected += self.power[2][(r, c)];
        }
        if !(after > 0.0) {
            return None;
        }
        let left = (left / after).clamp(0.0, 1.0);
        // Where hardly anything would be folded there is nothing to find.
        if !grows || !(folded > 1e-6 * unprotected) {
            return Some(Aliasing {
                folded_share: grows.then_some(0.0),
                unprotected_share: grows.then_some(0.0),
                folded_fraction: None,
                other_share: left,
            });
        }
        let fraction = (common / folded).max(0.0);
        let share = (fraction * fraction * folded / after).min(left);
        Some(Aliasing {
            folded_share: Some(share),
            unprotected_share: Some((folded / unprotected).clamp(0.0, 1.0)),
            folded_fraction: Some(fraction),
            other_share: left - share,
        })
    }
}

/// Sums over the bins of a ring.
#[derive(Clone, Copy, Default)]
struct Part {
    /// Cross-power, corrected for what is known of BEFORE's way.
    cross: Complex64,
    plain: Complex64,
    unprotected: Complex64,
    before: f64,
    after: f64,
    /// Frequency times BEFORE's power.
    frequency: f64,
    bins: f64,
}

impl Part {
    fn add(&mut self, other: &Part) {
        self.cross += other.cross;
        self.plain += other.plain;
        self.unprotected += other.unprotected;
        self.before += other.before;
        self.after += other.after;
        self.frequency += other.frequency;
        self.bins += other.bins;
    }
}
