//! Small dense systems of equations.

/// Solves `a x = b` by elimination with row pivots, after scaling rows and columns by the diagonal; `None` where the
/// system is singular to rounding.
pub fn solve<const N: usize>(a: &[[f64; N]; N], b: &[f64; N]) -> Option<[f64; N]> {
    let inverse = invert(a)?;
    Some(std::array::from_fn(|i| (0..N).map(|j| inverse[i][j] * b[j]).sum()))
}

/// The inverse of a symmetric positive matrix; `None` where it is singular to rounding.
pub fn invert<const N: usize>(a: &[[f64; N]; N]) -> Option<[[f64; N]; N]> {
    // Unknowns of unlike size (pixels, gains, offsets) are brought to one scale first.
    let scale: [f64; N] = std::array::from_fn(|i| a[i][i].sqrt());
    if scale.iter().any(|s| !(*s > 0.0) || !s.is_finite()) {
        return None;
    }
    let mut m: [[f64; N]; N] =
        std::array::from_fn(|i| std::array::from_fn(|j| a[i][j] / (scale[i] * scale[j])));
    let mut inverse: [[f64; N]; N] =
        std::array::from_fn(|i| std::array::from_fn(|j| if i == j { 1.0 } else { 0.0 }));
    for k in 0..N {
        let pivot = (k..N).max_by(|&i, &j| m[i][k].abs().total_cmp(&m[j][k].abs()))?;
        if !(m[pivot][k].abs() > 1e-13) {
            return None;
        }
        m.swap(k, pivot);
        inverse.swap(k, pivot);
        let factor = 1.0 / m[k][k];
        for j in 0..N {
            m[k][j] *= factor;
            inverse[k][j] *= factor;
        }
        for i in (0..N).filter(|i| *i != k) {
            let factor = m[i][k];
            for j in 0..N {
                m[i][j] -= factor * m[k][j];
                inverse[i][j] -= factor * inverse[k][j];
            }
        }
    }
    Some(std::array::from_fn(|i| std::array::from_fn(|j| inverse[i][j] / (scale[i] * scale[j]))))
}

/// The middle of some numbers (the mean of the two middle ones); NaN of none.
pub fn median(mut values: Vec<f64>) -> f64 {
    if values.is_empty() {
        return f64::NAN;
    }
    values.sort_by(f64::total_cmp);
    let n = values.len();
    0.5 * (values[(n - 1) / 2] + values[n / 2])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_matrix_times_its_inverse_is_one_and_a_singular_one_is_told() {
        let a = [[4.0e8, 1.0e4, 3.0], [1.0e4, 9.0, 0.001], [3.0, 0.001, 2.0e-4]];
        let inverse = invert(&a).unwrap_or_default();
        for i in 0..3 {
            for j in 0..3 {
                let v: f64 = (0..3).map(|k| a[i][k] * inverse[k][j]).sum();
                assert!((v - if i == j { 1.0 } else { 0.0 }).abs() < 1e-9, "{v}");
            }
        }
        assert!(invert(&[[1.0, 2.0], [2.0, 4.0]]).is_none());
        assert_eq!(median(vec![3.0, 1.0, 2.0, 10.0]), 2.5);
    }
}
