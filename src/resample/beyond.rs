//! What totals leave beyond the frame: cells like those within, which nobody keeps but the account.

use super::blocks::Engine;
use super::passes::{Passes, Span};
use super::settle::Shifted;
use crate::error::Result;
use std::ops::Range;

impl Engine<'_> {
    /// Cells beyond the frame that hold something; 0 of anything but totals.
    pub fn cells_beyond(&self) -> u64 {
        let count = |r: &Range<i64>| (r.end - r.start).max(0) as u64;
        self.parts_beyond().iter().map(|(r, c)| count(r) * count(c)).sum()
    }

    /// Adds up what a raster of totals leaves beyond the frame: the same cells as within, one by one. `alignment` and `side` are
    /// those of [`Engine::run`]; `watch` hears of finished cells.
    ///
    /// # Errors
    /// What the source or `watch` meets.
    pub fn beyond(
        &self,
        alignment: usize,
        side: Option<usize>,
        watch: &mut dyn FnMut(u64) -> Result<()>,
    ) -> Result<Shifted> {
        let mut all = Shifted::default();
        let parts = self.parts_beyond();
        if parts.is_empty() {
            return Ok(all);
        }
        let (height, width) = self.block_sides(alignment, side)?;
        let passes = Passes::<f64>::new(self);
        for (rows, columns) in parts {
            for r in rows.clone().step_by(height) {
                for c in columns.clone().step_by(width) {
                    let span = Span {
                        rows: r..(r + height as i64).min(rows.end),
                        columns: c..(c + width as i64).min(columns.end),
                    };
                    let (h, w) = span.size();
                    if let Some(prepared) = passes.prepare(self, &self.grown(&span))? {
                        for band in 0..self.source.header().bands {
                            let mut settled = self.settled(&prepared, &span, band)?;
                            // What is missing there was dropped there.
                            let there = settled.values.iter().filter(|v| !v.is_nan());
                            there.for_each(|v| settled.shifted.left_frame.add(*v));
                            all.merge(&settled.shifted);
                        }
                    }
                    watch((h * w) as u64)?;
                }
            }
        }
        Ok(all)
    }

    /// The rectangles of cells around the frame.
    fn parts_beyond(&self) -> Vec<(Range<i64>, Range<i64>)> {
        let Some((rows, columns)) = self.plan.touched(self.source_size(), self.rules) else {
            return Vec::new();
        };
        let (h, w) = (self.target.0 as i64, self.target.1 as i64);
        let (top, bottom) = (rows.start.min(0)..rows.end.min(0), rows.start.max(h)..rows.end.max(h));
        let middle = rows.start.clamp(0, h)..rows.end.clamp(0, h);
        let (left, right) =
            (columns.start.min(0)..columns.end.min(0), columns.start.max(w)..columns.end.max(w));
        let parts = [(top, columns.clone()), (bottom, columns), (middle.clone(), left), (middle, right)];
        parts.into_iter().filter(|(r, c)| !r.is_empty() && !c.is_empty()).collect()
    }
}
