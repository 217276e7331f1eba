//! Grids and maps: there and back, common grids, snapping.
#![allow(clippy::unwrap_used)]

use approx::assert_relative_eq;
use proptest::prelude::*;
use regauge::grid::{Grid, Span, round_size, span};
use regauge::map::{Map, Motion};

fn grid(rows: usize, columns: usize, pixel: f64, degrees: f64, x: f64, y: f64) -> Grid {
    let (s, c) = degrees.to_radians().sin_cos();
    let world = [[pixel * c, pixel * s, x], [pixel * s, -pixel * c, y]];
    Grid { world: Some(world), ..Grid::new(rows, columns) }
}

#[test]
fn equal_grids_far_from_the_origin_are_whole_pixels_apart() {
    // Eastings and northings of millions must not turn a copy into a resampling.
    let a = grid(5000, 5000, 0.1, 0.0, 500_000.05, 5_899_999.95);
    let b = grid(5000, 5000, 0.1, 0.0, 500_000.05 + 0.1 * 37.0, 5_899_999.95 - 0.1 * 12.0);
    assert_eq!(a.to(&b).unwrap(), Map::shift(-12.0, -37.0));
    assert_eq!(a.to(&a).unwrap(), Map::IDENTITY);
}

#[test]
fn union_and_overlap_count_whole_pixels_from_the_first_corner() {
    let a = grid(10, 10, 2.0, 0.0, 1.0, 19.0);
    let b = grid(10, 10, 2.0, 0.0, 8.0, 15.5);
    let all = span(&[a.clone(), b.clone()], Span::Union, None).unwrap();
    assert_eq!((all.rows, all.columns), (12, 14));
    assert_eq!(all.world, a.world);
    let both = span(&[a.clone(), b.clone()], Span::Overlap, None).unwrap();
    assert_eq!((both.rows, both.columns), (8, 6));
    assert_eq!(both.world_at(-0.5, -0.5), (8.0, 16.0));
    let coarse = span(&[a.clone(), b.clone()], Span::Union, Some((5.0, 5.0))).unwrap();
    assert_eq!((coarse.rows, coarse.columns), (5, 6));
    assert_eq!(coarse.world_at(-0.5, -0.5), a.world_at(-0.5, -0.5));
    let far = grid(10, 10, 2.0, 0.0, 900.0, 900.0);
    assert!(span(&[a, far], Span::Overlap, None).is_err());
}

#[test]
fn turns_are_counter_clockwise_and_keep_circles_on_oblong_pixels() {
    let turn = Motion { turn: 90.0, ..Motion::about_centre(11, 11) }.map().unwrap();
    // What was right of the centre is above it.
    assert_eq!(turn.apply(5.0, 10.0), (0.0, 5.0));
    let oblong = Motion { turn: 33.0, pixel: (3.0, 1.0), ..Motion::about_centre(11, 11) }.map().unwrap();
    for (r, c) in [(6.0, 5.0), (5.0, 6.0), (7.5, 2.0)] {
        let (p, q) = oblong.apply(r, c);
        let distance = |r: f64, c: f64| (3.0 * (r - 5.0)).hypot(c - 5.0);
        assert_relative_eq!(distance(p, q), distance(r, c), max_relative = 1e-12);
    }
    let all =
        Motion { shift: (1.0, -2.0), turn: 10.0, scale: 1.5, shear: 0.2, ..Motion::about_centre(20, 30) };
    let (r, c) = all.map().unwrap().apply(12.0, 7.0);
    // out = about + T S K (in - about) + shift, written out.
    let (dr, dc) = (12.0 - 9.5, 7.0 - 14.5 + 0.2 * (12.0 - 9.5));
    let (s, k) = 10f64.to_radians().sin_cos();
    assert_relative_eq!(r, 9.5 + 1.5 * (k * dr - s * dc) + 1.0, max_relative = 1e-12);
    assert_relative_eq!(c, 14.5 + 1.5 * (s * dr + k * dc) - 2.0, max_relative = 1e-12);
}

proptest! {
    #[test]
    fn world_positions_come_back(
        size in (1usize..9000, 1usize..9000), pixel in 1e-3f64..1e3, degrees in -180.0f64..180.0,
        x in -1e7f64..1e7, y in -1e7f64..1e7, at in (0.0f64..1.0, 0.0f64..1.0), other in (1e-2f64..1e2, -180.0f64..180.0),
    ) {
        let a = grid(size.0, size.1, pixel, degrees, x, y);
        let b = grid(100, 100, pixel * other.0, other.1, x + 5.0 * pixel, y - 3.0 * pixel);
        let (r, c) = (at.0 * size.0 as f64, at.1 * size.1 as f64);
        let there = a.to(&b).unwrap();
        let (p, q) = there.apply(r, c);
        let (r2, c2) = b.to(&a).unwrap().apply(p, q);
        prop_assert!((r - r2).abs() < 1e-6 && (c - c2).abs() < 1e-6, "{r} {c} became {r2} {c2}");
    }

    #[test]
    fn maps_compose_and_undo(
        m in prop::array::uniform6(-2.0f64..2.0), tilt in (-1e-3f64..1e-3, -1e-3f64..1e-3), at in (0.0f64..100.0, 0.0f64..100.0),
    ) {
        prop_assume!((m[0] * m[3] - m[1] * m[2]).abs() > 0.05);
        let map = Map { matrix: [[m[0], m[1], m[4]], [m[2], m[3], m[5]], [tilt.0, tilt.1, 1.0]] };
        let Ok(back) = map.invert() else { return Ok(()) };
        let both = map.then(&back);
        // A projective matrix is known up to a factor.
        let w = both.matrix[2][2];
        for i in 0..3 {
            for j in 0..3 {
                let wanted = if i == j { 1.0 } else { 0.0 };
                prop_assert!((both.matrix[i][j] / w - wanted).abs() < 1e-9);
            }
        }
        let (r, c) = map.apply(at.0, at.1);
        if r.is_finite() && c.is_finite() {
            let j = map.jacobian(at.0, at.1);
            let d = 1e-6;
            let (r2, c2) = map.apply(at.0 + d, at.1);
            prop_assert!((r2 - r - d * j[0][0]).abs() < 1e-9 && (c2 - c - d * j[1][0]).abs() < 1e-9);
        }
    }

    #[test]
    fn sizes_round_half_up(n in 1usize..100_000, factor in 0.01f64..10.0) {
        let size = round_size(n as f64 * factor);
        prop_assert!((size as f64 - n as f64 * factor).abs() <= 0.5 + 1e-8 || size == 1);
    }

    #[test]
    fn a_common_grid_holds_what_it_promises(
        a in (1usize..50, 1usize..50, 0.5f64..3.0), b in (1usize..50, 1usize..50, 0.5f64..3.0, -30.0f64..30.0, -40.0f64..40.0, -40.0f64..40.0),
    ) {
        let first = grid(a.0, a.1, a.2, 0.0, 0.0, 0.0);
        let second = grid(b.0, b.1, b.2, b.3, b.4, b.5);
        let all = span(&[first.clone(), second.clone()], Span::Union, None).unwrap();
        for g in [&first, &second] {
            let to = g.to(&all).unwrap().bounds((-0.5, g.rows as f64 - 0.5), (-0.5, g.columns as f64 - 0.5));
            prop_assert!(to.rows.0 > -0.5 - 1e-5 && to.rows.1 < all.rows as f64 - 0.5 + 1e-5);
            prop_assert!(to.columns.0 > -0.5 - 1e-5 && to.columns.1 < all.columns as f64 - 0.5 + 1e-5);
        }
        // The lattice goes through the first grid's pixels.
        let to = first.to(&all).unwrap();
        prop_assert!(to.matrix[0][2].fract() == 0.0 && to.matrix[1][2].fract() == 0.0);
    }
}
