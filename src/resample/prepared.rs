//! What the passes make of one block that was read.

use super::axis::is_inside;
use super::blocks::Engine;
use super::chain::{Chain, Part, Stretch};
use super::gather::{By, Look, Nodes, gather, squares_of_ones};
use super::majority::majority;
use super::overlap::{Give, overlap};
use super::passes::{Passes, Prepared, Span};
use super::rows_and_columns::{Plane, resample};
use super::rules::Outside;
use super::settle::{Mask, Resampled};
use super::squares::Squares;
use super::values::Values;
use super::variance::{self, Noise, Variance};
use crate::error::Result;
use crate::kernel::Extension;
use crate::map::Map;
use crate::raster::{Samples, Source, Window};
use crate::real::Real;
use ndarray::Array2;

impl<T: Real> Prepared<'_, T> {
    /// Whether a sample that the block needs is missing in a band.
    pub fn has_missing(&self, band: usize) -> bool {
        self.patch.has_missing(band)
    }

    /// The resampled values of a band with what the mask needs, if a sample is missing.
    pub fn resampled(&self, band: usize, what: Plane) -> Resampled<T> {
        let values = self.values(band, what);
        let mask = self.has_missing(band).then(|| self.mask(band));
        Resampled { values, mask }
    }

    /// The variance of a band's outputs before gaps are divided out.
    ///
    /// # Errors
    /// When the source or the sigma plane cannot be read.
    pub fn variance(&self, noise: &Noise, band: usize) -> Result<Array2<f64>> {
        let engine = self.engine;
        let source = Variance::new(engine.source, &engine.codes, noise, band);
        let by = (&engine.rules.kernel, engine.rules.edges());
        let total = engine.rules.values == Values::Total;
        match self.passes {
            Passes::Axes { swapped, rows, columns } => {
                variance::of_axes(&source, (&rows.axis, &columns.axis), *swapped, by, &self.span)
            }
            Passes::Gather { rows, columns, look, .. } => {
                let Some((r, c)) = &self.stretches else { return Ok(Array2::zeros(self.span.size())) };
                let nodes = (&r.wanted, &c.wanted);
                variance::of_gather(&source, look, (&rows.axis, &columns.axis), by, nodes, &self.span)
            }
            Passes::Overlap { back, .. } | Passes::Majority { back, .. } => {
                let inside = total || by.1 == Extension::Open;
                variance::of_overlap(&source, back, by.1, (inside, total), &self.span)
            }
            Passes::Shear { shears, .. } => {
                let Some((rows, columns)) = shears.window(by.0, &self.span.rows, &self.span.columns) else {
                    return Ok(Array2::zeros(self.span.size()));
                };
                let window = Window { rows, columns };
                let Samples::F64(values) = source.read(0..1, &window)? else {
                    return Ok(Array2::zeros(self.span.size()));
                };
                let size = engine.source_size();
                let input = |r: usize, c: usize| {
                    let (r, c) = shears.view.of(r, c, size);
                    let at = (r - window.rows.start) * window.columns.len() + c - window.columns.start;
                    values.get(at).copied().unwrap_or(0.0)
                };
                Ok(shears.variance(by.0, &self.span.rows, &self.span.columns, input))
            }
        }
    }

    fn axes_of<'b>(&'b self, rows: &'b Chain<T>, columns: &'b Chain<T>) -> Option<Axes<'b, T>> {
        let (r, c) = self.stretches.as_ref()?;
        Some(Axes { rows: (rows, r), columns: (columns, c) })
    }

    /// What the chains of both axes make of a band.
    fn plane(&self, axes: &Axes<T>, band: usize, what: Plane, part: Part) -> Array2<T> {
        resample(&self.patch, band, what, part, axes.rows, axes.columns)
    }

    /// Resampled values; NaN where there is nothing.
    fn values(&self, band: usize, what: Plane) -> Array2<T> {
        let nothing = || nothing(self.engine, &self.span);
        match self.passes {
            Passes::Axes { rows, columns, .. } => {
                let Some(axes) = self.axes_of(rows, columns) else { return nothing() };
                let mut values = self.plane(&axes, band, what, Part::Whole);
                self.blank(&mut values, &axes);
                values
            }
            Passes::Gather { rows, columns, look, .. } => {
                let Some(axes) = self.axes_of(rows, columns) else { return nothing() };
                let values = self.plane(&axes, band, what, Part::Whole);
                self.look_at(look, &values, By::Weights, None)
            }
            Passes::Overlap { rows, columns, back } => {
                let Some(axes) = self.axes_of(rows, columns) else { return nothing() };
                let mut out = self.over(back, &self.plane(&axes, band, what, Part::Whole), self.gives());
                if self.engine.rules.values == Values::Total {
                    let fill = self.of_nothing();
                    out.iter_mut().filter(|v| v.to_f64().is_nan()).for_each(|v| *v = fill);
                }
                out
            }
            Passes::Majority { rows, columns, back } => {
                let Some(axes) = self.axes_of(rows, columns) else { return nothing() };
                let plane = self.plane(&axes, band, what, Part::Whole);
                let mask = self.has_missing(band).then(|| self.plane(&axes, band, Plane::Mask, Part::Whole));
                let rules = self.engine.rules;
                let keep = |r: f64, c: f64| self.keeps(back, r, c);
                let limits = (rules.edges() == Extension::Open).then(|| self.engine.source_size());
                majority(
                    back,
                    (&plane, mask.as_ref(), self.origin),
                    limits,
                    &self.span,
                    rules.min_coverage,
                    keep,
                )
            }
            Passes::Shear { shears, .. } => {
                let mut values = self.sheared(band, what);
                let fill = self.of_nothing();
                for ((r, c), v) in values.indexed_iter_mut() {
                    if !shears.receives(self.span.rows.start + r as i64, self.span.columns.start + c as i64) {
                        *v = fill;
                    }
                }
                values
            }
        }
    }

    /// The responses to the mask.
    fn mask(&self, band: usize) -> Mask<T> {
        let empty = || Mask { whole: nothing(self.engine, &self.span), taps: None, moduli: None };
        match self.passes {
            Passes::Axes { rows, columns, .. } => {
                let Some(axes) = self.axes_of(rows, columns) else { return empty() };
                let mut whole = self.plane(&axes, band, Plane::Mask, Part::Whole);
                let filtered = rows.is_filtered() || columns.is_filtered();
                let mut taps = filtered.then(|| self.plane(&axes, band, Plane::Mask, Part::Weights));
                if self.engine.rules.values == Values::Total {
                    let lengths = (lengths(axes.rows), lengths(axes.columns));
                    divide(&mut whole, &lengths);
                    taps.iter_mut().for_each(|t| divide(t, &lengths));
                }
                let (mr, mc) = (rows.moduli(axes.rows.1), columns.moduli(axes.columns.1));
                let moduli = (mr.is_some() || mc.is_some()).then(|| {
                    let axes = Axes {
                        rows: (rows, mr.as_ref().unwrap_or(axes.rows.1)),
                        columns: (columns, mc.as_ref().unwrap_or(axes.columns.1)),
                    };
                    let mut moduli = self.plane(&axes, band, Plane::Mask, Part::Weights);
                    if self.engine.rules.values == Values::Total {
                        // Moduli come divided by their sum, other weights sum to the cell's length.
                        let unit = |l: Vec<f64>, own: bool| if own { vec![1.0; l.len()] } else { l };
                        divide(
                            &mut moduli,
                            &(
                                unit(lengths(axes.rows), mr.is_some()),
                                unit(lengths(axes.columns), mc.is_some()),
                            ),
                        );
                    }
                    moduli
                });
                Mask { whole, taps, moduli }
            }
            Passes::Gather { rows, columns, look, .. } => {
                let Some(axes) = self.axes_of(rows, columns) else { return empty() };
                let whole = self.plane(&axes, band, Plane::Mask, Part::Whole);
                let plain = squares_of_ones(&whole);
                let whole = self.look_at(look, &whole, By::Weights, Some(&plain));
                let raw = self.plane(&axes, band, Plane::Mask, Part::Weights);
                let filtered = rows.is_filtered() || columns.is_filtered();
                let plain = squares_of_ones(&raw);
                let taps = filtered.then(|| self.look_at(look, &raw, By::Weights, Some(&plain)));
                Mask { whole, taps, moduli: Some(self.look_at(look, &raw, By::Moduli, Some(&plain))) }
            }
            Passes::Overlap { rows, columns, back } => {
                let Some(axes) = self.axes_of(rows, columns) else { return empty() };
                let whole = self.over(back, &self.plane(&axes, band, Plane::Mask, Part::Whole), Give::Mean);
                Mask { whole, taps: None, moduli: None }
            }
            // The majority takes gaps as a class of their own.
            Passes::Majority { .. } => {
                Mask { whole: Array2::from_elem(self.span.size(), T::ONE), taps: None, moduli: None }
            }
            Passes::Shear { .. } => {
                let mut whole = self.sheared(band, Plane::Mask);
                let all = self.sheared(band, Plane::Ones);
                whole.zip_mut_with(&all, |w, a| *w = if a.to_f64() > 1e-9 { *w / *a } else { T::ONE });
                Mask { whole, taps: None, moduli: None }
            }
        }
    }

    fn sheared(&self, band: usize, what: Plane) -> Array2<T> {
        let Passes::Shear { shears, prefilter } = self.passes else {
            return nothing(self.engine, &self.span);
        };
        let (height, width) = self.patch.size();
        let mut plane = Array2::<f64>::zeros((height, width));
        let mut mask = vec![0.0; width];
        for (r, mut line) in plane.rows_mut().into_iter().enumerate() {
            if let Some(line) = line.as_slice_mut() {
                what.load(&self.patch, band, r, line, &mut mask);
            }
        }
        let size = self.engine.source_size();
        let input = |r: usize, c: usize| {
            let (r, c) = shears.view.of(r, c, size);
            let at = (r as i64 - self.origin.0, c as i64 - self.origin.1);
            plane.get((at.0 as usize, at.1 as usize)).copied().unwrap_or(0.0)
        };
        let kernel = &self.engine.rules.kernel;
        let out = shears.apply(kernel, prefilter.as_ref(), &self.span.rows, &self.span.columns, input);
        out.mapv(T::from_f64)
    }

    fn look_at(&self, look: &Look, values: &Array2<T>, by: By, plain: Option<&Squares>) -> Array2<T> {
        gather(look, &Nodes { values, origin: self.origin }, by, &self.span, plain)
    }

    fn over(&self, back: &Map, values: &Array2<T>, give: Give) -> Array2<T> {
        let rules = self.engine.rules;
        let total = rules.values == Values::Total;
        let inside_only = total || rules.edges() == Extension::Open;
        let limits = inside_only.then(|| self.engine.source_size());
        let keep = |r: f64, c: f64| total || self.keeps(back, r, c);
        overlap(back, &Nodes { values, origin: self.origin }, limits, &self.span, give, keep)
    }

    fn gives(&self) -> Give {
        if self.engine.rules.values == Values::Total { Give::Sum } else { Give::Mean }
    }

    fn keeps(&self, back: &Map, row: f64, column: f64) -> bool {
        let size = self.engine.source_size();
        let (x, y) = back.apply(row, column);
        self.engine.rules.outside == Outside::Extend || (is_inside(x, size.0) && is_inside(y, size.1))
    }

    /// What a cell of totals is that receives nothing.
    fn of_nothing(&self) -> T {
        of_nothing(self.engine)
    }

    /// Marks as missing what lies outside, and what an open raster offers nothing for.
    fn blank(&self, values: &mut Array2<T>, axes: &Axes<T>) {
        let engine = self.engine;
        let total = engine.rules.values == Values::Total;
        let there = |axis: &(&Chain<T>, &Stretch<T>)| -> Vec<bool> {
            let extends = engine.rules.outside == Outside::Extend;
            axis.1
                .wanted
                .clone()
                .map(|o| {
                    if total {
                        let (low, high) = axis.0.axis.cell(o);
                        return high > low;
                    }
                    (extends || axis.0.axis.is_inside(o)) && axis.0.is_reached(axis.1, o)
                })
                .collect()
        };
        let (r, c) = (there(&axes.rows), there(&axes.columns));
        if r.iter().chain(&c).all(|t| *t) {
            return;
        }
        let fill = of_nothing(engine);
        for (mut line, row_there) in values.rows_mut().into_iter().zip(r) {
            line.iter_mut()
                .zip(&c)
                .filter(|(_, column_there)| !(row_there && **column_there))
                .for_each(|(v, _)| *v = fill);
        }
    }
}

/// The chains of both axes with their stretches.
struct Axes<'a, T> {
    rows: (&'a Chain<T>, &'a Stretch<T>),
    columns: (&'a Chain<T>, &'a Stretch<T>),
}

/// The lengths of the cells of a stretch, in input cells.
fn lengths<T: Real>(axis: (&Chain<T>, &Stretch<T>)) -> Vec<f64> {
    let length = |o| {
        let (low, high) = axis.0.axis.cell(o);
        high - low
    };
    axis.1.wanted.clone().map(length).collect()
}

fn divide<T: Real>(plane: &mut Array2<T>, lengths: &(Vec<f64>, Vec<f64>)) {
    for (mut row, a) in plane.rows_mut().into_iter().zip(&lengths.0) {
        row.iter_mut().zip(&lengths.1).filter(|(_, b)| *b * a > 0.0).for_each(|(v, b)| {
            *v = T::from_f64(v.to_f64() / (a * b));
        });
    }
}

/// What an output pixel is that nothing reaches: missing; of totals that need not say so, 0.
fn of_nothing<T: Real>(engine: &Engine) -> T {
    let none = engine.rules.values == Values::Total && engine.rules.outside == Outside::Extend;
    if none { T::default() } else { T::from_f64(f64::NAN) }
}

/// A block of which nothing is seen.
pub(super) fn nothing<T: Real>(engine: &Engine, span: &Span) -> Array2<T> {
    Array2::from_elem(span.size(), of_nothing(engine))
}
