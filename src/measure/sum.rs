//! A sum that keeps what rounding would drop.

/// A running sum with its compensation: Neumaier 1974, Z. Angew. Math. Mech. 54:39-51.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Sum {
    sum: f64,
    rest: f64,
}

impl Sum {
    /// Adds a number.
    #[inline(always)]
    pub fn add(&mut self, v: f64) {
        let t = self.sum + v;
        self.rest += if self.sum.abs() >= v.abs() { (self.sum - t) + v } else { (v - t) + self.sum };
        self.sum = t;
    }

    /// Adds another sum.
    pub fn merge(&mut self, other: &Sum) {
        self.add(other.sum);
        self.add(other.rest);
    }

    /// The total.
    pub fn value(&self) -> f64 {
        self.sum + self.rest
    }
}

impl FromIterator<f64> for Sum {
    fn from_iter<I: IntoIterator<Item = f64>>(values: I) -> Self {
        let mut sum = Sum::default();
        values.into_iter().for_each(|v| sum.add(v));
        sum
    }
}
