//! Where signal went: closure on a coarse grid of cells over AFTER.

use super::solve::median;
use crate::measure::Sum;
use serde::Serialize;
use std::ops::Range;

/// The most cells along an axis.
const MOST: usize = 16;

/// Closure in cells of AFTER's grid.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct ClosureMap {
    /// Cells along rows.
    pub rows: usize,
    /// Cells along columns.
    pub columns: usize,
    /// First row of AFTER of each cell, and AFTER's number of rows at the end.
    pub row_edges: Vec<usize>,
    /// First column of AFTER of each cell, and AFTER's number of columns at the end.
    pub column_edges: Vec<usize>,
    /// (after - before) / sum of |before| of each cell, row after row; null where BEFORE holds (next to) nothing.
    pub closure: Vec<Option<f64>>,
    /// (after - before) / sum of |before| of the whole raster: what the cell adds to the closure.
    pub share: Vec<f64>,
    #[serde(skip)]
    sums: Vec<[Sum; 3]>,
}

/// How a loss (or gain) lies over the raster.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum LossKind {
    /// Nothing to speak of, anywhere.
    None,
    /// The same share everywhere.
    Even,
    /// In a few cells.
    Local,
    /// Neither.
    Uneven,
}

/// A loss in words and numbers.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Loss {
    /// How it lies.
    pub kind: LossKind,
    /// The median of the cells' closure.
    pub typical: Option<f64>,
    /// Half of the middle half's breadth of the cells' closure, as a standard deviation (1.4826 times the median of moduli).
    pub spread: Option<f64>,
    /// The cells that hold nine tenths of a local loss, as row and column of the map.
    pub cells: Vec<[usize; 2]>,
}

impl ClosureMap {
    /// For a raster AFTER of `size` (rows, columns).
    pub fn new(size: (usize, usize)) -> Self {
        let edges = |n: usize| -> Vec<usize> {
            let k = n.clamp(1, MOST);
            (0..=k).map(|i| i * n / k).collect()
        };
        let (row_edges, column_edges) = (edges(size.0), edges(size.1));
        let (rows, columns) = (row_edges.len() - 1, column_edges.len() - 1);
        ClosureMap {
            rows,
            columns,
            row_edges,
            column_edges,
            closure: vec![None; rows * columns],
            share: vec![0.0; rows * columns],
            sums: vec![[Sum::default(); 3]; rows * columns],
        }
    }

    /// The column cells that `columns` meets, each with its part of them.
    pub fn column_parts(&self, columns: &Range<usize>) -> Vec<(usize, Range<usize>)> {
        (0..self.columns)
            .filter_map(|k| {
                let part = self.column_edges[k].max(columns.start)..self.column_edges[k + 1].min(columns.end);
                (!part.is_empty()).then_some((k, part))
            })
            .collect()
    }

    /// Adds signal of a part of one row: before, |before| and after.
    pub fn add(&mut self, row: usize, column_cell: usize, before: f64, modulus: f64, after: f64) {
        let row_cell = self.row_edges.partition_point(|e| *e <= row).saturating_sub(1);
        if let Some(cell) = self.sums.get_mut(row_cell * self.columns + column_cell) {
            cell[0].add(before);
            cell[1].add(modulus);
            cell[2].add(after);
        }
    }

    /// Sums over all cells: before, |before|, after.
    pub fn totals(&self) -> [f64; 3] {
        let mut all = [Sum::default(); 3];
        for cell in &self.sums {
            for (a, c) in all.iter_mut().zip(cell) {
                a.merge(c);
            }
        }
        all.map(|s| s.value())
    }

    /// (after - before) / sum of |before| over all cells; `None` if that is 0.
    pub fn total_closure(&self) -> Option<f64> {
        let [before, modulus, after] = self.totals();
        (modulus > 0.0 && modulus.is_finite()).then(|| (after - before) / modulus)
    }

    /// Turns sums into closures and says how the loss lies.
    pub fn finish(&mut self) -> Loss {
        let [_, modulus, _] = self.totals();
        let least = 1e-3 * modulus / self.sums.len().max(1) as f64;
        for (i, cell) in self.sums.iter().enumerate() {
            let [b, m, a] = cell.map(|s| s.value());
            self.closure[i] = (m > least && m > 0.0).then(|| (a - b) / m);
            self.share[i] = if modulus > 0.0 { (a - b) / modulus } else { 0.0 };
        }
        let there: Vec<f64> = self.closure.iter().flatten().copied().collect();
        let total: f64 = self.share.iter().sum();
        let moved: f64 = self.share.iter().map(|s| s.abs()).sum();
        if there.is_empty() {
            return Loss { kind: LossKind::None, typical: None, spread: None, cells: Vec::new() };
        }
        let typical = median(there.clone());
        let spread = 1.4826 * median(there.iter().map(|c| (c - typical).abs()).collect());
        let mut cells = Vec::new();
        // What cells differ by through rounding and kernels is below this.
        const SMALL: f64 = 2e-3;
        let worst = there.iter().fold(0.0f64, |a, c| a.max((c - typical).abs()));
        let kind = if total.abs() < SMALL && typical.abs() < SMALL && worst < (10.0 * spread).max(0.02) {
            LossKind::None
        } else if typical.abs() > SMALL
            && spread < 0.3 * typical.abs()
            && (total - typical).abs() < 0.3 * typical.abs()
        {
            LossKind::Even
        } else {
            // The fewest cells that hold nine tenths of all that stands out.
            let excess = |i: usize| match self.closure[i] {
                Some(c) if (c - typical).abs() > (5.0 * spread).max(SMALL) => self.share[i].abs(),
                _ => 0.0,
            };
            let mut order: Vec<usize> = (0..self.share.len()).filter(|i| excess(*i) > 0.0).collect();
            order.sort_by(|a, b| excess(*b).total_cmp(&excess(*a)));
            let all: f64 = order.iter().map(|i| excess(*i)).sum();
            let mut held = 0.0;
            for i in order {
                if held >= 0.9 * all {
                    break;
                }
                held += excess(i);
                cells.push([i / self.columns, i % self.columns]);
            }
            cells.sort_unstable();
            let few = 4 * cells.len() <= there.len().max(4);
            if !cells.is_empty() && few && all > 0.5 * moved.min(total.abs().max(SMALL)) {
                LossKind::Local
            } else {
                cells.clear();
                LossKind::Uneven
            }
        };
        Loss { kind, typical: Some(typical), spread: Some(spread), cells }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn map(after: impl Fn(usize, usize) -> f64) -> (ClosureMap, Loss) {
        let mut m = ClosureMap::new((40, 64));
        for r in 0..40 {
            for (k, part) in m.column_parts(&(0..64)) {
                let before = part.len() as f64;
                m.add(r, k, before, before, part.map(|c| after(r, c)).sum());
            }
        }
        let loss = m.finish();
        (m, loss)
    }

    #[test]
    fn even_and_local_losses_are_told_apart() {
        let (m, even) = map(|r, c| 0.97 + 1e-3 * ((r * 7 + c) % 5) as f64);
        assert_eq!(even.kind, LossKind::Even);
        assert!((m.total_closure().unwrap_or(0.0) + 0.028).abs() < 1e-3);
        let (m, local) = map(|r, c| if r < 5 && (8..12).contains(&c) { 0.0 } else { 1.0 });
        assert_eq!(local.kind, LossKind::Local);
        assert_eq!(local.cells, [[0, 2], [1, 2]]);
        assert_eq!((m.rows, m.columns), (16, 16));
        assert!((m.total_closure().unwrap_or(0.0) + 20.0 / 2560.0).abs() < 1e-12);
        assert_eq!(map(|_, _| 1.0).1.kind, LossKind::None);
        assert_eq!(map(|r, _| 0.9 + 0.005 * r as f64).1.kind, LossKind::Uneven);
    }
}
