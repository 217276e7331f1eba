//! Convex polygons in (row, column): clipped and measured.

/// A corner: row, column.
pub type Corner = (f64, f64);

/// Keeps the part of a polygon where `height` is not negative; `height` must be linear in the position.
/// Sutherland and Hodgman 1974, CACM 17(1):32-42.
pub fn clip(polygon: &[Corner], height: impl Fn(&Corner) -> f64, out: &mut Vec<Corner>) {
    out.clear();
    for (i, p) in polygon.iter().enumerate() {
        let q = &polygon[(i + 1) % polygon.len()];
        let (a, b) = (height(p), height(q));
        if a >= 0.0 {
            out.push(*p);
        }
        if (a > 0.0 && b < 0.0) || (a < 0.0 && b > 0.0) {
            let t = a / (a - b);
            out.push((p.0 + t * (q.0 - p.0), p.1 + t * (q.1 - p.1)));
        }
    }
}

/// The area, by the shoelace sum relative to the first corner, so that large coordinates do not cancel.
pub fn area(polygon: &[Corner]) -> f64 {
    let Some(&(r, c)) = polygon.first() else { return 0.0 };
    let twice: f64 =
        polygon.windows(2).map(|w| (w[0].0 - r) * (w[1].1 - c) - (w[1].0 - r) * (w[0].1 - c)).sum();
    0.5 * twice.abs()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_clipped_triangle_has_the_area_of_its_part() {
        let triangle = [(1e6, 1e6), (1e6 + 4.0, 1e6), (1e6, 1e6 + 3.0)];
        assert_eq!(area(&triangle), 6.0);
        let mut out = Vec::new();
        // Beyond half its height a quarter is left.
        clip(&triangle, |p| p.0 - (1e6 + 2.0), &mut out);
        assert!((area(&out) - 1.5).abs() < 1e-9, "{out:?}");
        clip(&triangle, |_| -1.0, &mut out);
        assert_eq!(area(&out), 0.0);
    }
}
