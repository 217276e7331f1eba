//! The variance of turned totals: the three passes composed, weight by weight.

use super::line::Line;
use super::{Shears, hull, line};
use crate::kernel::{Extension, Kernel, Place};
use crate::resample::conserve::Conserving;
use crate::resample::effective::{Filter, Run};
use ndarray::Array2;
use ndarray::parallel::prelude::*;
use std::collections::BTreeMap;
use std::ops::Range;

impl Shears {
    /// The variance of a block of outputs, through the squares of what the three passes together take of each input pixel.
    /// `input` gives the variance of a view's (row, column).
    pub(in crate::resample) fn variance(
        &self,
        kernel: &Kernel,
        rows: &Range<i64>,
        columns: &Range<i64>,
        input: impl Fn(usize, usize) -> f64 + Sync,
    ) -> Array2<f64> {
        let filter = kernel.is_prefiltered().then(|| Filter::new(&kernel.symbol(), 0, false));
        let runs = |step: usize, cells: &Range<i64>, reached: &Range<i64>, across: i64| {
            LineRuns::new(Line::new(&self.steps[step], across, cells, reached), kernel, filter.as_ref())
        };
        let (all, needs) = (0..self.size.1 as i64, self.needs(kernel, rows, columns));
        let rows_at = needs.rows_1.start;
        let firsts: Vec<LineRuns> =
            needs.rows_1.map(|r| runs(0, &all, &line(&self.first, 0, r), r)).collect();
        let mut out = Array2::<f64>::zeros((rows.clone().count(), columns.clone().count()));
        out.axis_iter_mut(ndarray::Axis(0)).into_par_iter().enumerate().for_each(|(i, mut lane)| {
            let r = rows.start + i as i64;
            let third =
                runs(2, &line(&self.row_cells, self.rows_at, r), &line(&self.third, self.rows_at, r), r);
            // Of each column after the first pass, what row r takes of its rows.
            let mut seconds: BTreeMap<i64, Run> = BTreeMap::new();
            let mut buffer: Vec<f64> = Vec::new();
            for (v, j) in lane.iter_mut().zip(columns.clone()) {
                let across = third.of(j);
                let Some(cells) = across.range() else { continue };
                while seconds.first_key_value().is_some_and(|(c, _)| *c < cells.start) {
                    seconds.pop_first();
                }
                let mut parts: Vec<(f64, i64, Run)> = Vec::new();
                for (a, c) in across.weights.iter().zip(cells) {
                    let second = seconds.entry(c).or_insert_with(|| {
                        let cells = line(&self.column_cells, self.columns_at, c);
                        runs(1, &cells, &line(&self.second, self.columns_at, c), c).of(r)
                    });
                    for (b, row) in second.weights.iter().zip(second.first..) {
                        if let Some(first) = usize::try_from(row - rows_at).ok().and_then(|i| firsts.get(i)) {
                            parts.push((a * b, row, first.of(c)));
                        }
                    }
                }
                *v = squares(&parts, &mut buffer, &input);
            }
        });
        out
    }
}

/// The sum of squares times variance of weights that come in parts: a factor, a row, and weights along it.
fn squares(parts: &[(f64, i64, Run)], buffer: &mut Vec<f64>, input: &impl Fn(usize, usize) -> f64) -> f64 {
    let rows = hull(parts.iter().map(|p| p.1..p.1 + 1));
    let columns = hull(parts.iter().filter_map(|p| p.2.range()));
    let width = (columns.end - columns.start) as usize;
    buffer.clear();
    buffer.resize((rows.end - rows.start) as usize * width, 0.0);
    for (factor, row, run) in parts.iter().filter(|p| !p.2.weights.is_empty()) {
        let at = (row - rows.start) as usize * width + (run.first - columns.start) as usize;
        buffer[at..].iter_mut().zip(&run.weights).for_each(|(s, w)| *s += factor * w);
    }
    let mut sum = 0.0;
    for (line, r) in buffer.chunks(width.max(1)).zip(rows) {
        for (w, c) in line.iter().zip(columns.clone()).filter(|(w, _)| **w != 0.0) {
            sum += w * w * input(r as usize, c as usize);
        }
    }
    sum
}

/// What the cells of one new line take of the cells of the old one.
struct LineRuns<'a> {
    line: Line<'a>,
    conserving: Conserving,
    filter: Option<&'a Filter>,
    /// Where the pass only shifts: what the first inner cell takes, which all other inner cells take from farther on.
    even: Option<Run>,
}

impl<'a> LineRuns<'a> {
    fn new(line: Line<'a>, kernel: &Kernel, filter: Option<&'a Filter>) -> Self {
        let n = (line.cells.end - line.cells.start).max(0) as usize;
        let mut runs = LineRuns { conserving: Conserving::new(kernel, n), line, filter, even: None };
        let inner = runs.line.reached.start + 1;
        let shifts = runs.line.step.scale == 1.0 && !runs.conserving.is_whole_line();
        if shifts && inner + 1 < runs.line.reached.end {
            runs.even = Some(runs.between(runs.line.edge(inner), runs.line.edge(inner) + 1.0));
        }
        runs
    }

    /// The weights of the cell between two edges on the line's cells, beyond its ends as well.
    fn between(&self, low: f64, high: f64) -> Run {
        let mut run = Run::default();
        run.first = self.conserving.cell(low, high, &mut run.weights);
        if let Some(filter) = self.filter {
            run = filter.back(&run);
        }
        run.trim_finely();
        run
    }

    /// What the new cell `j` takes; indices are those of the lattice.
    fn of(&self, j: i64) -> Run {
        let line = &self.line;
        if !line.reached.contains(&j) || line.cells.is_empty() {
            return Run::default();
        }
        let inner = line.reached.start + 1;
        let mut run = match &self.even {
            Some(even) if (inner..line.reached.end - 1).contains(&j) => {
                Run { first: even.first + j - inner, weights: even.weights.clone() }
            }
            _ => self.between(line.edge(j), line.edge(j + 1)),
        };
        let n = (line.cells.end - line.cells.start) as usize;
        if run.first < 0 || run.first + run.weights.len() as i64 > n as i64 {
            let mut folded = Run::default();
            for (w, k) in run.weights.iter().zip(run.first..) {
                if let Place::Sample(i) = Extension::HalfSymmetric.place(k, n) {
                    folded.add(i as i64, &[*w], 1.0);
                }
            }
            run = folded;
        }
        run.first += line.cells.start;
        run
    }
}
