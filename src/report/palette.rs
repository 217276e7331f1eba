//! The palettes of the pictures, each a path through OKLab.
//!
//! - [`Palette::Sequential`]: from dark petrol through moss to pale straw. Lightness rises evenly, so the order can be
//!   read in grey and by every eye.
//! - [`Palette::Diverging`]: rust below zero, off-white at zero, blue above. Both arms have the same lightness and
//!   chroma at the same distance from zero, and their hues lie along the axis that colour-blind eyes keep.
//! - [`class_colour`]: classes have no order; neighbours differ in hue and in lightness.
//! - Missing pixels are a flat grey with a hatch, which no palette can be taken for.

use super::colour::Oklab;

/// What values are painted with.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Palette {
    /// For values in order, such as elevation: dark is low.
    Sequential,
    /// For differences about zero.
    Diverging,
}

/// Ground of missing pixels.
pub const MISSING_GROUND: Oklab = Oklab { l: 0.875, a: 0.0, b: 0.0 };
/// Hatch of missing pixels.
pub const MISSING_HATCH: Oklab = Oklab { l: 0.68, a: 0.0, b: 0.0 };

impl Palette {
    /// The colour at `t`, which is held to 0 to 1; 0.5 is the neutral middle of [`Palette::Diverging`].
    pub fn at(self, t: f64) -> Oklab {
        let t = if t.is_nan() { 0.5 } else { t.clamp(0.0, 1.0) };
        match self {
            Palette::Sequential => {
                let hue = 222.0 - 134.0 * t.powf(0.85);
                let chroma = 0.052 + 0.052 * (std::f64::consts::PI * t).sin();
                Oklab::from_lch(0.40 + 0.55 * t, chroma, hue)
            }
            Palette::Diverging => {
                let s = (2.0 * t - 1.0).abs();
                // A little hue along each arm tells strong from weak where lightness alone would be hard.
                let hue = if t < 0.5 { 76.0 - 34.0 * s } else { 226.0 + 32.0 * s };
                Oklab::from_lch(0.968 - 0.508 * s, 0.122 * s.powf(0.8), hue)
            }
        }
    }
}

/// The colour of the class in place `i` among its fellows: hues a golden angle apart, in four steps of lightness, so that
/// neighbours differ for every eye.
pub fn class_colour(i: usize) -> Oklab {
    const LIGHTNESS: [f64; 4] = [0.54, 0.82, 0.66, 0.42];
    Oklab::from_lch(LIGHTNESS[i % 4], 0.1, 235.0 + 137.507_764 * i as f64).into_gamut()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::colour::{linear_from_rgb, rgb_from_linear};

    /// Full dichromacy on linear sRGB. Source: Machado, Oliveira and Fernandes, "A physiologically-based model for
    /// simulation of color vision deficiency", IEEE TVCG 15(6), 2009, severity 1.0.
    const DICHROMATS: [(&str, [[f64; 3]; 3]); 3] = [
        (
            "protan",
            [
                [0.152286, 1.052583, -0.204868],
                [0.114503, 0.786281, 0.099216],
                [-0.003882, -0.048116, 1.051998],
            ],
        ),
        (
            "deutan",
            [
                [0.367322, 0.860646, -0.227968],
                [0.280085, 0.672501, 0.047413],
                [-0.011820, 0.042940, 0.968881],
            ],
        ),
        (
            "tritan",
            [
                [1.255528, -0.076749, -0.178779],
                [-0.078411, 0.930809, 0.147602],
                [0.004733, 0.691367, 0.303900],
            ],
        ),
    ];

    fn seen_by(matrix: &[[f64; 3]; 3], colour: Oklab) -> Oklab {
        let v = linear_from_rgb(colour.to_rgb());
        let seen = matrix.map(|row| row[0] * v[0] + row[1] * v[1] + row[2] * v[2]);
        Oklab::from_rgb(rgb_from_linear(seen))
    }

    #[test]
    fn the_palettes_need_no_clipping() {
        for palette in [Palette::Sequential, Palette::Diverging] {
            for i in 0..=500 {
                let colour = palette.at(f64::from(i) / 500.0);
                assert!(colour.in_gamut(), "{palette:?} {i} {:?}", colour.to_lch());
            }
        }
    }

    #[test]
    fn sequential_lightness_rises_evenly_for_every_eye() {
        let steps = 20;
        let colours: Vec<Oklab> =
            (0..=steps).map(|i| Palette::Sequential.at(f64::from(i) / f64::from(steps))).collect();
        for (name, matrix) in DICHROMATS {
            for pair in colours.windows(2) {
                assert!(seen_by(&matrix, pair[1]).l > seen_by(&matrix, pair[0]).l + 0.005, "{name}");
            }
        }
        for pair in colours.windows(2) {
            let rise = Oklab::from_rgb(pair[1].to_rgb()).l - Oklab::from_rgb(pair[0].to_rgb()).l;
            assert!((rise - 0.55 / f64::from(steps)).abs() < 0.006, "{rise}");
        }
    }

    #[test]
    fn classes_stay_apart_for_every_eye() {
        let colours: Vec<Oklab> = (0..8).map(class_colour).collect();
        for (name, matrix) in DICHROMATS {
            for (i, a) in colours.iter().enumerate() {
                for (j, b) in colours.iter().enumerate().take(i) {
                    let apart = seen_by(&matrix, *a).distance(seen_by(&matrix, *b));
                    assert!(apart > 0.04, "{name}: {j} and {i} are {apart} apart");
                }
            }
        }
    }

    #[test]
    fn diverging_arms_are_mirror_images_in_lightness_and_chroma() {
        let mut last = f64::INFINITY;
        for i in 0..=50 {
            let s = f64::from(i) / 100.0;
            let (below, above) = (Palette::Diverging.at(0.5 - s), Palette::Diverging.at(0.5 + s));
            assert!((below.l - above.l).abs() < 1e-12);
            assert!((below.to_lch().1 - above.to_lch().1).abs() < 1e-12);
            assert!(below.l < last, "lightness falls away from zero");
            last = below.l;
        }
        assert!(Palette::Diverging.at(0.5).to_lch().1 < 1e-12);
    }

    #[test]
    fn diverging_arms_stay_apart_for_dichromats() {
        for (name, matrix) in DICHROMATS {
            let mut last = 0.0;
            for i in 1..=10 {
                let s = f64::from(i) / 20.0;
                let below = seen_by(&matrix, Palette::Diverging.at(0.5 - s));
                let above = seen_by(&matrix, Palette::Diverging.at(0.5 + s));
                // Compare what lightness cannot tell: hue and chroma only.
                let apart = (below.a - above.a).hypot(below.b - above.b);
                assert!(apart > 0.9 * last, "{name}: {apart} after {last}");
                if i >= 3 {
                    assert!(apart > 0.055, "{name} at {s}: {apart}");
                }
                if i == 10 {
                    assert!(apart > 0.12, "{name}: {apart}");
                }
                last = apart;
            }
        }
    }

    #[test]
    fn a_red_and_green_pair_would_fail() {
        // The check above can fail: red against green of one lightness is lost on the deutan.
        let (red, green) = (Oklab::from_lch(0.55, 0.12, 29.0), Oklab::from_lch(0.55, 0.12, 142.0));
        let (red, green) = (seen_by(&DICHROMATS[1].1, red), seen_by(&DICHROMATS[1].1, green));
        assert!((red.a - green.a).hypot(red.b - green.b) < 0.12);
    }

    #[test]
    fn missing_is_no_palette_colour() {
        for palette in [Palette::Sequential, Palette::Diverging] {
            for i in 0..=200 {
                let colour = palette.at(f64::from(i) / 200.0);
                assert!(colour.distance(MISSING_GROUND) > 0.03, "{palette:?} {i}");
            }
        }
    }
}
