//! Where a plane is plain, told square by square: what is nothing but plain need not be looked at sample by sample.

use ndarray::Array2;

/// Squares of a plane, each plain throughout or not.
pub struct Squares {
    plain: Array2<bool>,
    size: (usize, usize),
}

impl Squares {
    const SIDE: usize = 16;

    /// Looks at the rows of a plane of `size`.
    pub fn of<V>(size: (usize, usize), values: &[V], is_plain: impl Fn(&V) -> bool) -> Self {
        let mut plain = Array2::from_elem((size.0.div_ceil(Self::SIDE), size.1.div_ceil(Self::SIDE)), true);
        for (r, line) in values.chunks_exact(size.1.max(1)).enumerate() {
            let mut squares = plain.row_mut(r / Self::SIDE);
            for (square, part) in squares.iter_mut().zip(line.chunks(Self::SIDE)) {
                *square &= part.iter().all(&is_plain);
            }
        }
        Squares { plain, size }
    }

    /// Whether all is plain from the first to the last row and column; what lies beyond the plane is not known to be.
    pub fn holds(&self, rows: (i64, i64), columns: (i64, i64)) -> bool {
        let inside = |r: (i64, i64), n: usize| r.0 >= 0 && r.1 < n as i64;
        inside(rows, self.size.0) && inside(columns, self.size.1) && self.holds_within(rows, columns)
    }

    /// The same for the part of these rows and columns that lies in the plane.
    pub fn holds_within(&self, rows: (i64, i64), columns: (i64, i64)) -> bool {
        let squares = |r: (i64, i64), n: usize| {
            let end = r.1.min(n as i64 - 1);
            if r.0 > end {
                0..0
            } else {
                r.0.max(0) as usize / Self::SIDE..end.max(0) as usize / Self::SIDE + 1
            }
        };
        squares(rows, self.size.0).all(|i| squares(columns, self.size.1).all(|k| self.plain[(i, k)]))
    }
}

#[cfg(test)]
mod tests {
    use super::Squares;

    #[test]
    fn one_odd_sample_spoils_its_square_alone() {
        let (h, w) = (40, 50);
        let mut plane = vec![1.0; h * w];
        plane[17 * w + 33] = 0.0;
        let squares = Squares::of((h, w), &plane, |v| *v == 1.0);
        assert!(squares.holds((0, 15), (0, 49)));
        assert!(squares.holds((16, 39), (0, 31)));
        assert!(!squares.holds((16, 16), (32, 32)));
        assert!(!squares.holds((0, 39), (0, 49)));
        assert!(squares.holds((32, 39), (48, 49)));
    }

    #[test]
    fn beyond_the_plane_nothing_is_known() {
        let squares = Squares::of((4, 4), &[1.0; 16], |v| *v == 1.0);
        assert!(!squares.holds((-1, 2), (0, 3)));
        assert!(!squares.holds((0, 4), (0, 3)));
        assert!(squares.holds_within((-5, 9), (-5, 9)));
        assert!(squares.holds_within((-5, -2), (6, 9)));
    }
}
