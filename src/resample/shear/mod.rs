//! Turned totals: a quarter turn or mirror of the input, then three passes along rows, columns and rows again, each of
//! which keeps the totals of its lines.
//!
//! A turn by less than 45 degrees is a shear along rows, one along columns, and one along rows (Unser, Thevenaz and
//! Yaroslavsky 1995, "Convolution-based interpolation for fast, high-quality rotation of images", IEEE Trans. Image
//! Process. 4(10):1371-1381); any affine map is, with a scale in each pass. Every line is a line of cells of its own: it begins and ends
//! with the cells that hold something, and its content is moved by the shift that belongs to the line's centre.

mod line;
mod variance;

use self::line::{Line, for_lines};
use super::conserve::Conserving;
use crate::kernel::{Kernel, Prefilter};
use crate::map::Map;
use ndarray::Array2;
use std::ops::Range;

/// How the input is looked at before the shears.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct View {
    /// Rows are the input's columns.
    pub swapped: bool,
    /// The view's rows run backwards through the input's axis that they show.
    pub flip_rows: bool,
    /// The same for columns.
    pub flip_columns: bool,
}

impl View {
    /// The pixel of a raster of `size` that the view's (row, column) shows.
    pub fn of(&self, row: usize, column: usize, size: (usize, usize)) -> (usize, usize) {
        let (n, m) = if self.swapped { (size.1, size.0) } else { size };
        let r = if self.flip_rows { n - 1 - row } else { row };
        let c = if self.flip_columns { m - 1 - column } else { column };
        if self.swapped { (c, r) } else { (r, c) }
    }
}

/// One pass: content at position p of the line whose centre is at `across` goes to `scale * p + slope * across + shift`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Step {
    scale: f64,
    slope: f64,
    shift: f64,
}

/// The three passes of one map with the extents of all their lines.
#[derive(Clone, Debug, PartialEq)]
pub struct Shears {
    /// From output to input positions.
    pub back: Map,
    /// How the input is looked at.
    pub view: View,
    /// Rows and columns of the view.
    size: (usize, usize),
    steps: [Step; 3],
    /// Columns that row r of the view reaches after the first pass.
    first: Vec<Range<i64>>,
    /// Columns in all after the first pass begin here.
    columns_at: i64,
    /// For each such column, the rows that hold something.
    column_cells: Vec<Range<i64>>,
    /// For each such column, the rows it reaches after the second pass.
    second: Vec<Range<i64>>,
    /// Rows in all after the second pass begin here.
    rows_at: i64,
    /// For each such row, the columns that hold something.
    row_cells: Vec<Range<i64>>,
    /// For each such row, the columns that it reaches in the end.
    third: Vec<Range<i64>>,
}

impl Step {
    /// Where the edge `u` of a line goes, both measured from the outer edge of cell 0.
    fn ahead(&self, u: f64, across: f64) -> f64 {
        self.scale * (u - 0.5) + self.slope * across + self.shift + 0.5
    }

    /// The edge of the line that the edge `j` of the new line shows.
    fn back(&self, j: i64, across: f64) -> f64 {
        (j as f64 - 0.5 - self.slope * across - self.shift) / self.scale + 0.5
    }

    /// The cells that the cells `line` reach.
    fn reached(&self, line: &Range<i64>, across: f64) -> Range<i64> {
        if line.is_empty() {
            return 0..0;
        }
        // A rounding's breadth is no reach: what little lies there goes to the cell beside.
        const SLACK: f64 = 1e-9;
        let low = (self.ahead(line.start as f64, across) + SLACK).floor() as i64;
        let high = (self.ahead(line.end as f64, across) - SLACK).ceil() as i64;
        low..high.max(low + 1)
    }
}

impl Shears {
    /// The passes for a raster of `source` pixels under the affine map `back` (output to input positions).
    ///
    /// # Errors
    /// When the map has no inverse.
    pub fn new(source: (usize, usize), back: &Map) -> crate::Result<Self> {
        let onward = back.invert()?;
        let (view, size, m) = choose_view(source, &onward);
        let (a, b, t) = (m.matrix[0][0], m.matrix[0][1], m.matrix[0][2]);
        let (c, d, u) = (m.matrix[1][0], m.matrix[1][1], m.matrix[1][2]);
        // M = third * second * first; the second pass scales by the length of M's first row, what is left of the determinant
        // goes to the first pass where columns grow and to the third where they shrink.
        let second = a.hypot(b);
        let rest = (a * d - b * c) / second;
        let (first, third) = (rest.max(1.0), rest.min(1.0));
        let slope_2 = b / first;
        // Written so that nothing cancels for small turns: second - a = b^2 / (second + a).
        let slope_1 = -b * first / (second + a);
        let slope_3 = (d * b / (second + a) + c) / second;
        let steps = [
            Step { scale: first, slope: slope_1, shift: 0.0 },
            Step { scale: second, slope: slope_2, shift: t },
            Step { scale: third, slope: slope_3, shift: u - slope_3 * t },
        ];
        let (n, w) = (size.0 as i64, size.1 as i64);
        let first: Vec<Range<i64>> = (0..n).map(|r| steps[0].reached(&(0..w), r as f64)).collect();
        let (columns_at, column_cells) = transposed(&first, 0);
        let second: Vec<Range<i64>> = column_cells
            .iter()
            .zip(columns_at..)
            .map(|(cells, c)| steps[1].reached(cells, c as f64))
            .collect();
        let (rows_at, row_cells) = transposed(&second, columns_at);
        let third: Vec<Range<i64>> =
            row_cells.iter().zip(rows_at..).map(|(cells, r)| steps[2].reached(cells, r as f64)).collect();
        Ok(Shears {
            back: *back,
            view,
            size,
            steps,
            first,
            columns_at,
            column_cells,
            second,
            rows_at,
            row_cells,
            third,
        })
    }

    /// Rows and columns of the output's lattice that hold something.
    pub fn touched(&self) -> (Range<i64>, Range<i64>) {
        let rows = self.rows_at..self.rows_at + self.third.len() as i64;
        (rows, hull(self.third.iter().cloned()))
    }

    /// Whether an output cell receives anything.
    pub fn receives(&self, row: i64, column: i64) -> bool {
        line(&self.third, self.rows_at, row).contains(&column)
    }

    /// What the block of outputs needs of every stage.
    fn needs(&self, kernel: &Kernel, rows: &Range<i64>, columns: &Range<i64>) -> Needs {
        let filtered = kernel.is_prefiltered();
        let conserving = Conserving::new(kernel, 1);
        let (radius, whole) = (conserving.radius(), conserving.is_whole_line());
        let need =
            |step: &Step, across: i64, cells: &Range<i64>, reached: &Range<i64>, wanted: &Range<i64>| {
                let wanted = wanted.start.max(reached.start)..wanted.end.min(reached.end);
                if wanted.is_empty() || cells.is_empty() {
                    return 0..0;
                }
                if whole {
                    return cells.clone();
                }
                Line::new(step, across, cells, reached).cells_for(&wanted, radius, filtered)
            };
        let rows_3 = rows.start.max(self.rows_at)..rows.end.min(self.rows_at + self.third.len() as i64);
        let columns_2 = hull(rows_3.clone().map(|r| {
            let (cells, reached) =
                (line(&self.row_cells, self.rows_at, r), line(&self.third, self.rows_at, r));
            need(&self.steps[2], r, &cells, &reached, columns)
        }));
        let rows_1 = hull(columns_2.clone().map(|c| {
            let cells = line(&self.column_cells, self.columns_at, c);
            let reached = line(&self.second, self.columns_at, c);
            need(&self.steps[1], c, &cells, &reached, &rows_3)
        }));
        let cells = 0..self.size.1 as i64;
        let columns_0 = hull(
            rows_1.clone().map(|r| need(&self.steps[0], r, &cells, &line(&self.first, 0, r), &columns_2)),
        );
        Needs { rows: rows_3, columns_2, rows_1, columns_0 }
    }

    /// The window of the input that a block of outputs needs; `None` if nothing of it does.
    pub fn window(
        &self,
        kernel: &Kernel,
        rows: &Range<i64>,
        columns: &Range<i64>,
    ) -> Option<(Range<usize>, Range<usize>)> {
        let needs = self.needs(kernel, rows, columns);
        if needs.rows_1.is_empty() || needs.columns_0.is_empty() {
            return None;
        }
        let un = |r: &Range<i64>, flip: bool, n: usize| {
            let (a, b) = (r.start as usize, r.end as usize);
            if flip { n - b..n - a } else { a..b }
        };
        let rows = un(&needs.rows_1, self.view.flip_rows, self.size.0);
        let columns = un(&needs.columns_0, self.view.flip_columns, self.size.1);
        Some(if self.view.swapped { (columns, rows) } else { (rows, columns) })
    }

    /// Numbers that a block needs at its largest stage: input window, both planes between, output.
    pub fn block_numbers(&self, kernel: &Kernel, rows: &Range<i64>, columns: &Range<i64>) -> usize {
        let needs = self.needs(kernel, rows, columns);
        let area = |r: &Range<i64>, c: &Range<i64>| r.clone().count().saturating_mul(c.clone().count());
        let between = area(&needs.rows_1, &needs.columns_2);
        area(&needs.rows_1, &needs.columns_0) + 2 * between + 2 * area(&needs.rows, &needs.columns_2)
    }

    /// Resamples a block. `input` gives the sample of a view's (row, column), which lies in the window of
    /// [`Shears::window`].
    pub fn apply(
        &self,
        kernel: &Kernel,
        prefilter: Option<&Prefilter<f64>>,
        rows: &Range<i64>,
        columns: &Range<i64>,
        input: impl Fn(usize, usize) -> f64 + Sync,
    ) -> Array2<f64> {
        let needs = self.needs(kernel, rows, columns);
        let length = |r: &Range<i64>| r.clone().count();
        // First pass: lines are the view's rows.
        let mut plane = Array2::<f64>::zeros((length(&needs.rows_1), length(&needs.columns_2)));
        let pass = |step: usize, cells: &Range<i64>, reached: &Range<i64>, across: i64| {
            Line::new(&self.steps[step], across, cells, reached)
        };
        for_lines(&mut plane, |i, out, work| {
            let r = needs.rows_1.start + i as i64;
            let line = pass(0, &(0..self.size.1 as i64), &line(&self.first, 0, r), r);
            line.apply(kernel, prefilter, &needs.columns_2, out, work, |c| input(r as usize, c as usize));
        });
        // Second pass: lines are columns.
        let mut turned = Array2::<f64>::zeros((length(&needs.columns_2), length(&needs.rows)));
        let from = plane.t().as_standard_layout().into_owned();
        for_lines(&mut turned, |i, out, work| {
            let c = needs.columns_2.start + i as i64;
            let cells = line(&self.column_cells, self.columns_at, c);
            let line = pass(1, &cells, &line(&self.second, self.columns_at, c), c);
            line.apply(kernel, prefilter, &needs.rows, out, work, |r| {
                usize::try_from(r - needs.rows_1.start)
                    .ok()
                    .and_then(|r| from.get((i, r)))
                    .copied()
                    .unwrap_or(0.0)
            });
        });
        // Third pass: lines are rows again.
        let from = turned.t().as_standard_layout().into_owned();
        let mut out = Array2::<f64>::zeros((length(rows), length(columns)));
        for_lines(&mut out, |i, out, work| {
            let r = rows.start + i as i64;
            let cells = line(&self.row_cells, self.rows_at, r);
            let line = pass(2, &cells, &line(&self.third, self.rows_at, r), r);
            let Ok(row) = usize::try_from(r - needs.rows.start) else { return };
            line.apply(kernel, prefilter, columns, out, work, |c| {
                usize::try_from(c - needs.columns_2.start)
                    .ok()
                    .and_then(|c| from.get((row, c)))
                    .copied()
                    .unwrap_or(0.0)
            });
        });
        out
    }
}

/// What a block needs: output rows that hold something, columns after the first pass, rows before the second, columns
/// of the view.
struct Needs {
    rows: Range<i64>,
    columns_2: Range<i64>,
    rows_1: Range<i64>,
    columns_0: Range<i64>,
}

/// The quarter turn or mirror after which the map turns least, the size of that view, and the map from it.
fn choose_view(source: (usize, usize), onward: &Map) -> (View, (usize, usize), Map) {
    let mut best: Option<(f64, View, (usize, usize), Map)> = None;
    for bits in 0..8 {
        let view = View { swapped: bits & 1 != 0, flip_rows: bits & 2 != 0, flip_columns: bits & 4 != 0 };
        let size = if view.swapped { (source.1, source.0) } else { source };
        let along = |n: usize, flip: bool| if flip { (-1.0, n as f64 - 1.0) } else { (1.0, 0.0) };
        let (r, c) = (along(size.0, view.flip_rows), along(size.1, view.flip_columns));
        let into = if view.swapped {
            // The view's rows give the input's columns.
            Map::affine([[0.0, c.0, c.1], [r.0, 0.0, r.1]])
        } else {
            Map::axes(r, c)
        };
        let map = into.then(onward);
        let m = &map.matrix;
        if m[0][0] * m[1][1] - m[0][1] * m[1][0] <= 0.0 {
            continue;
        }
        let upright = m[0][0] / m[0][0].hypot(m[0][1]) + m[1][1] / m[1][0].hypot(m[1][1]);
        if best.as_ref().is_none_or(|(most, ..)| upright > *most) {
            best = Some((upright, view, size, map));
        }
    }
    // An invertible map has a determinant of one sign or the other, and half of the views take each.
    best.map_or(
        (View { swapped: false, flip_rows: false, flip_columns: false }, source, *onward),
        |(_, view, size, map)| (view, size, map),
    )
}

/// The lines of a set of parallel ranges, seen across: where they begin, and for each the hull of the indices (counted
/// from `at`) whose range holds it.
fn transposed(ranges: &[Range<i64>], at: i64) -> (i64, Vec<Range<i64>>) {
    let all = hull(ranges.iter().cloned());
    let mut out = vec![0..0; all.clone().count()];
    for (range, i) in ranges.iter().zip(at..) {
        for k in range.clone() {
            let line: &mut Range<i64> = &mut out[(k - all.start) as usize];
            // The indices come in order: the first begins the line, every one may end it.
            let start = if line.is_empty() { i } else { line.start };
            *line = start..i + 1;
        }
    }
    (all.start, out)
}

fn hull(ranges: impl Iterator<Item = Range<i64>>) -> Range<i64> {
    ranges.filter(|r| !r.is_empty()).reduce(|a, b| a.start.min(b.start)..a.end.max(b.end)).unwrap_or(0..0)
}

fn line(lines: &[Range<i64>], at: i64, index: i64) -> Range<i64> {
    usize::try_from(index - at).ok().and_then(|i| lines.get(i)).cloned().unwrap_or(0..0)
}
