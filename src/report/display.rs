//! How a raster fills a panel: small ones with whole-number repeats of each pixel, large ones as means of blocks.

/// Whole-number steps from a raster to a panel.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Display {
    /// Raster pixels averaged into one, (rows, columns).
    pub block: (usize, usize),
    /// Picture pixels that show one, (rows, columns).
    pub repeat: (usize, usize),
}

impl Display {
    /// The largest display whose sides stay within `side` picture pixels. `pixel` is (height, width) of a raster
    /// pixel in any one unit; a pixel that is not square is shown as near to its shape as whole numbers come.
    pub fn fit(rows: usize, columns: usize, pixel: (f64, f64), side: usize) -> Self {
        let ratio = |a: f64, b: f64| {
            let r = a / b;
            if r.is_finite() { r.clamp(1.0, 64.0) } else { 1.0 }
        };
        let (small, large) = (pixel.0.min(pixel.1), pixel.0.max(pixel.1));
        let repeat_of = |k: usize| {
            let times = |size: f64| ((k as f64 * ratio(size, small)).round() as usize).max(1);
            (times(pixel.0), times(pixel.1))
        };
        let fits =
            |(r, c): (usize, usize)| rows.saturating_mul(r) <= side && columns.saturating_mul(c) <= side;
        let most = side / rows.max(columns).max(1);
        if let Some(repeat) = (1..=most).rev().map(repeat_of).find(|r| fits(*r)) {
            return Display { block: (1, 1), repeat };
        }
        let block_of = |k: usize| {
            let times = |size: f64| ((k as f64 * ratio(large, size)).round() as usize).max(1);
            (times(pixel.0), times(pixel.1))
        };
        let too_big = |(r, c): (usize, usize)| rows.div_ceil(r) > side || columns.div_ceil(c) > side;
        let least = (rows.max(columns) / 64).div_ceil(side.max(1)).max(1);
        let mut k = least;
        while too_big(block_of(k)) {
            k += 1;
        }
        Display { block: block_of(k), repeat: (1, 1) }
    }

    /// Rows and columns after averaging.
    pub fn shown(&self, rows: usize, columns: usize) -> (usize, usize) {
        (rows.div_ceil(self.block.0), columns.div_ceil(self.block.1))
    }

    /// Means over blocks; a block is missing (NaN) when fewer than half of its pixels are there.
    pub fn reduce(&self, values: &[f64], rows: usize, columns: usize) -> Vec<f64> {
        if self.block == (1, 1) {
            return values.to_vec();
        }
        let (out_rows, out_columns) = self.shown(rows, columns);
        let mut out = Vec::with_capacity(out_rows * out_columns);
        for row in 0..out_rows {
            let band = row * self.block.0..((row + 1) * self.block.0).min(rows);
            for column in 0..out_columns {
                let span = column * self.block.1..((column + 1) * self.block.1).min(columns);
                let (mut sum, mut there) = (0.0, 0usize);
                for r in band.clone() {
                    for v in values[r * columns + span.start..r * columns + span.end].iter() {
                        if v.is_finite() {
                            sum += v;
                            there += 1;
                        }
                    }
                }
                let enough = 2 * there >= band.len() * span.len() && there > 0;
                out.push(if enough { sum / there as f64 } else { f64::NAN });
            }
        }
        out
    }

    /// The value in the middle of each block: for class codes, whose means are nothing.
    pub fn pick(&self, values: &[f64], rows: usize, columns: usize) -> Vec<f64> {
        let (out_rows, out_columns) = self.shown(rows, columns);
        let middle = |i: usize, block: usize, n: usize| (i * block + block / 2).min(n - 1);
        let at = |r: usize, c: usize| {
            values[middle(r, self.block.0, rows) * columns + middle(c, self.block.1, columns)]
        };
        (0..out_rows).flat_map(|r| (0..out_columns).map(move |c| (r, c))).map(|(r, c)| at(r, c)).collect()
    }

    /// What a caption should say of it.
    pub fn note(&self) -> Option<String> {
        match (self.block, self.repeat) {
            ((1, 1), (1, 1)) => None,
            ((1, 1), (r, c)) => Some(format!("each pixel is drawn {r} × {c}")),
            ((r, c), _) => Some(format!("drawn as means of {r} × {c} pixels")),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn whole_steps() {
        let fit = |rows, columns, pixel| Display::fit(rows, columns, pixel, 600);
        assert_eq!(fit(240, 300, (2.0, 2.0)), Display { block: (1, 1), repeat: (2, 2) });
        assert_eq!(fit(7, 5, (1.0, 2.0)), Display { block: (1, 1), repeat: (60, 120) });
        assert_eq!(fit(601, 40, (1.0, 1.0)), Display { block: (2, 2), repeat: (1, 1) });
        assert_eq!(fit(1801, 900, (1.0, 2.0)), Display { block: (8, 4), repeat: (1, 1) }.halved());
        assert_eq!(fit(20_000, 20_000, (1.0, 1.0)), Display { block: (34, 34), repeat: (1, 1) });
        for (rows, columns, pixel) in
            [(1, 90_000, (1e9, 1e-9)), (50_000, 3, (f64::NAN, 1.0)), (599, 601, (1.0, 1.4))]
        {
            let d = fit(rows, columns, pixel);
            let (r, c) = d.shown(rows, columns);
            assert!(r * d.repeat.0 <= 600 && c * d.repeat.1 <= 600, "{d:?}");
        }
    }

    impl Display {
        fn halved(self) -> Self {
            Display { block: (self.block.0 / 2, self.block.1 / 2), repeat: self.repeat }
        }
    }

    #[test]
    fn means_over_what_is_there() {
        let nan = f64::NAN;
        #[rustfmt::skip]
        let values = [
            1.0, 2.0, 3.0, nan, 5.0,
            3.0, nan, nan, nan, 7.0,
            4.0, 6.0, nan, 8.0, nan,
        ];
        let got = Display { block: (2, 2), repeat: (1, 1) }.reduce(&values, 3, 5);
        assert_eq!(got[0], 2.0);
        assert!(got[1].is_nan());
        assert_eq!(got[2], 6.0);
        assert_eq!((got[3], got[4]), (5.0, 8.0));
        assert!(got[5].is_nan());
        assert_eq!(got.len(), 6);
    }
}
