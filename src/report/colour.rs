//! Colour: sRGB, linear sRGB and OKLab, and the way back into what a screen can show.
//!
//! OKLab is Björn Ottosson's ("A perceptual color space for image processing", 2020): equal steps of lightness and of
//! hue look about equal there, which is what a palette needs. The matrices are the published ones. The curve between
//! linear and stored sRGB is that of IEC 61966-2-1.

/// A stored sRGB colour: red, green, blue.
pub type Rgb = [u8; 3];

/// Linear sRGB: red, green, blue, each 0 to 1 where a screen can show it.
pub type Linear = [f64; 3];

/// A colour in OKLab.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Oklab {
    /// Lightness, 0 (black) to 1 (white).
    pub l: f64,
    /// Green (negative) to red.
    pub a: f64,
    /// Blue (negative) to yellow.
    pub b: f64,
}

/// Linear sRGB to cone responses.
const TO_CONES: [[f64; 3]; 3] = [
    [0.412_221_470_8, 0.536_332_536_3, 0.051_445_992_9],
    [0.211_903_498_2, 0.680_699_545_1, 0.107_396_956_6],
    [0.088_302_461_9, 0.281_718_837_6, 0.629_978_700_5],
];
/// Cube roots of the cone responses to lightness, a, b.
const TO_LAB: [[f64; 3]; 3] = [
    [0.210_454_255_3, 0.793_617_785_0, -0.004_072_046_8],
    [1.977_998_495_1, -2.428_592_205_0, 0.450_593_709_9],
    [0.025_904_037_1, 0.782_771_766_2, -0.808_675_766_0],
];
/// Lightness, a, b to cube roots of the cone responses.
const FROM_LAB: [[f64; 3]; 3] = [
    [1.0, 0.396_337_777_4, 0.215_803_757_3],
    [1.0, -0.105_561_345_8, -0.063_854_172_8],
    [1.0, -0.089_484_177_5, -1.291_485_548_0],
];
/// Cone responses to linear sRGB.
const FROM_CONES: [[f64; 3]; 3] = [
    [4.076_741_662_1, -3.307_711_591_3, 0.230_969_929_2],
    [-1.268_438_004_6, 2.609_757_401_1, -0.341_319_396_5],
    [-0.004_196_086_3, -0.703_418_614_7, 1.707_614_701_0],
];

/// A 3 x 3 matrix times a column.
fn times(m: &[[f64; 3]; 3], v: [f64; 3]) -> [f64; 3] {
    m.map(|row| row[0] * v[0] + row[1] * v[1] + row[2] * v[2])
}

/// Stored sRGB to linear.
pub fn linear_from_rgb(rgb: Rgb) -> Linear {
    rgb.map(|v| {
        let v = f64::from(v) / 255.0;
        if v <= 0.040_45 { v / 12.92 } else { ((v + 0.055) / 1.055).powf(2.4) }
    })
}

/// Linear sRGB to stored; what a screen cannot show is cut off channel by channel, so clip with
/// [`Oklab::into_gamut`] first.
pub fn rgb_from_linear(linear: Linear) -> Rgb {
    linear.map(|v| {
        let v = v.clamp(0.0, 1.0);
        let v = if v <= 0.003_130_8 { v * 12.92 } else { 1.055 * v.powf(1.0 / 2.4) - 0.055 };
        (v * 255.0).round() as u8
    })
}

impl Oklab {
    /// From linear sRGB.
    pub fn from_linear(linear: Linear) -> Self {
        let [l, a, b] = times(&TO_LAB, times(&TO_CONES, linear).map(f64::cbrt));
        Oklab { l, a, b }
    }

    /// To linear sRGB; values outside 0 to 1 are colours that a screen cannot show.
    pub fn to_linear(self) -> Linear {
        times(&FROM_CONES, times(&FROM_LAB, [self.l, self.a, self.b]).map(|v| v * v * v))
    }

    /// From stored sRGB.
    pub fn from_rgb(rgb: Rgb) -> Self {
        Oklab::from_linear(linear_from_rgb(rgb))
    }

    /// To stored sRGB, clipped into the gamut by giving up chroma.
    pub fn to_rgb(self) -> Rgb {
        rgb_from_linear(self.into_gamut().to_linear())
    }

    /// From lightness, chroma and hue in degrees (OKLCH): hue 0 is a pink red, 90 yellow, 180 green-blue, 270 blue.
    pub fn from_lch(l: f64, chroma: f64, hue: f64) -> Self {
        let (sin, cos) = hue.to_radians().sin_cos();
        Oklab { l, a: chroma * cos, b: chroma * sin }
    }

    /// Lightness, chroma, and hue in degrees from 0 up to 360; the hue of a grey means nothing.
    pub fn to_lch(self) -> (f64, f64, f64) {
        (self.l, self.a.hypot(self.b), self.b.atan2(self.a).to_degrees().rem_euclid(360.0))
    }

    /// Distance in OKLab; about 0.02 is just seen between large patches.
    pub fn distance(self, other: Oklab) -> f64 {
        (self.l - other.l).hypot(self.a - other.a).hypot(self.b - other.b)
    }

    /// Whether a screen can show it.
    pub fn in_gamut(self) -> bool {
        // The published matrices are each other's inverse to some 1e-7 only.
        self.to_linear().iter().all(|v| (-1e-6..=1.0 + 1e-6).contains(v))
    }

    /// The nearest colour of the same lightness and hue that a screen can show: chroma is reduced as far as it must.
    /// Lightness is held to 0 to 1.
    pub fn into_gamut(self) -> Self {
        if self.in_gamut() {
            return self;
        }
        let l = self.l.clamp(0.0, 1.0);
        let with = |share: f64| Oklab { l, a: self.a * share, b: self.b * share };
        let (mut inside, mut outside) = (0.0, 1.0);
        for _ in 0..24 {
            let middle = 0.5 * (inside + outside);
            if with(middle).in_gamut() {
                inside = middle;
            } else {
                outside = middle;
            }
        }
        with(inside)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn known_colours() {
        // Source: the table of example pairs and the sRGB primaries that follow from the published matrices
        // (Ottosson 2020), to the digits that are commonly printed.
        let cases = [
            ([255, 255, 255], [1.0, 0.0, 0.0]),
            ([0, 0, 0], [0.0, 0.0, 0.0]),
            ([255, 0, 0], [0.627_96, 0.224_86, 0.125_85]),
            ([0, 255, 0], [0.866_44, -0.233_89, 0.179_50]),
            ([0, 0, 255], [0.452_01, -0.032_46, -0.311_53]),
        ];
        for (rgb, [l, a, b]) in cases {
            let found = Oklab::from_rgb(rgb);
            assert!(found.distance(Oklab { l, a, b }) < 2e-5, "{rgb:?}: {found:?}");
        }
    }

    #[test]
    fn every_step_goes_there_and_back() {
        for red in (0..=255).step_by(15) {
            for green in (0..=255).step_by(17) {
                for blue in (0..=255).step_by(51) {
                    let rgb = [red as u8, green as u8, blue as u8];
                    let lab = Oklab::from_rgb(rgb);
                    assert_eq!(lab.to_rgb(), rgb);
                    let (l, chroma, hue) = lab.to_lch();
                    assert!(lab.distance(Oklab::from_lch(l, chroma, hue)) < 1e-12);
                    let linear = linear_from_rgb(rgb);
                    for (there, back) in linear.iter().zip(lab.to_linear()) {
                        assert!((there - back).abs() < 1e-6, "{rgb:?}: {there} {back}");
                    }
                }
            }
        }
        // The two branches of the curve meet where the standard says: code 10 is linear, code 11 is not.
        assert!((linear_from_rgb([10, 11, 255])[0] - 10.0 / 255.0 / 12.92).abs() < 1e-15);
        assert!((linear_from_rgb([10, 11, 255])[1] - 0.003_346_535_8).abs() < 1e-9);
    }

    #[test]
    fn clipping_gives_up_chroma_and_nothing_else() {
        for hue in (0..360).step_by(15) {
            for l in [0.2, 0.5, 0.75, 0.95] {
                let wanted = Oklab::from_lch(l, 0.4, f64::from(hue));
                assert!(!wanted.in_gamut());
                let got = wanted.into_gamut();
                let (l_got, chroma, hue_got) = got.to_lch();
                assert!(got.in_gamut() && chroma > 0.01 && chroma < 0.4);
                assert!((l_got - l).abs() < 1e-12);
                let turn = (hue_got - f64::from(hue) + 180.0).rem_euclid(360.0) - 180.0;
                assert!(turn.abs() < 1e-6, "{hue} {hue_got}");
                // No more than it must: a little more chroma is out again.
                assert!(!Oklab::from_lch(l, chroma + 1e-4, f64::from(hue)).in_gamut());
            }
        }
        assert_eq!(Oklab { l: 1.2, a: 0.1, b: 0.0 }.to_rgb(), [255, 255, 255]);
        assert_eq!(Oklab { l: -0.2, a: 0.1, b: 0.0 }.to_rgb(), [0, 0, 0]);
    }
}
