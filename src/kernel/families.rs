//! The kernels by name: one row a family. Adding a kernel means adding a row here.

use super::pieces::{Pieces, split};
use super::windowed::Window;
use super::{Kernel, Shape};
use crate::error::{Error, Result};

/// One family of kernels: how it is named and how it is built.
pub struct Family {
    /// The name before the colon.
    pub name: &'static str,
    /// The parameters after the colon, as help shows them; empty if there are none.
    pub parameters: &'static str,
    /// The members that `regauge kernels` lists.
    pub listed: &'static [&'static str],
    /// What it is, in a line.
    pub about: &'static str,
    /// Builds a member, or says what the parameters must be.
    build: fn(&[f64]) -> Result<Parts, &'static str>,
}

/// What a row of the table yields: the parameters as written in the full name, and the kernel's parts.
struct Parts {
    suffix: String,
    shape: Shape,
    prefiltered: bool,
    order: Option<u32>,
    regularity: Option<i32>,
}

impl Parts {
    fn new(suffix: impl Into<String>, shape: Shape, order: Option<u32>, regularity: Option<i32>) -> Self {
        Parts { suffix: suffix.into(), shape, prefiltered: false, order, regularity }
    }

    fn prefiltered(self) -> Self {
        Parts { prefiltered: true, ..self }
    }
}

/// A parameter that must be a whole number in a range.
fn whole(p: &[f64], low: usize, high: usize) -> Option<usize> {
    let [v] = p else { return None };
    (v.fract() == 0.0 && *v >= low as f64 && *v <= high as f64).then_some(*v as usize)
}

fn none(p: &[f64], parts: Parts) -> Result<Parts, &'static str> {
    if p.is_empty() { Ok(parts) } else { Err("no parameters") }
}

/// Every kernel Regauge knows.
pub static FAMILIES: &[Family] = &[
    Family {
        name: "nearest",
        parameters: "",
        listed: &["nearest"],
        about: "the nearest sample; for labels",
        build: |p| none(p, Parts::new("", Shape::Pieces(Pieces::b_spline(0)), Some(1), Some(-1))),
    },
    Family {
        name: "linear",
        parameters: "",
        listed: &["linear"],
        about: "straight lines between samples",
        build: |p| none(p, Parts::new("", Shape::Pieces(Pieces::b_spline(1)), Some(2), Some(0))),
    },
    Family {
        name: "keys",
        parameters: "A",
        listed: &["keys"],
        about: "cubic convolution; A = -0.5 unless given",
        build: |p| {
            let a = match p {
                [] => -0.5,
                [a] if (-3.0..=0.0).contains(a) => *a,
                _ => return Err("one number from -3 to 0, such as keys:-0.75"),
            };
            let suffix = if a == -0.5 { String::new() } else { format!(":{a}") };
            let order = if a == -0.5 { 3 } else { 1 };
            Ok(Parts::new(suffix, Shape::Pieces(Pieces::bc_spline(0.0, -a)), Some(order), Some(1)))
        },
    },
    Family {
        name: "keys6",
        parameters: "",
        listed: &["keys6"],
        about: "cubic convolution over six points",
        build: |p| {
            let pieces = Pieces::from_even(&[&[12, 0, -28, 16], &[30, -59, 36, -7], &[-18, 21, -8, 1]], 12);
            none(p, Parts::new("", Shape::Pieces(pieces), Some(4), Some(1)))
        },
    },
    Family {
        name: "bc-spline",
        parameters: "B,C",
        listed: &["bc-spline:1/3,1/3"],
        about: "the two-parameter cubic; blurs even in place where B > 0",
        build: |p| match p {
            [b, c] if (0.0..=3.0).contains(b) && (0.0..=3.0).contains(c) => {
                let order = match (*b, *c) {
                    (0.0, 0.5) => 3,
                    (b, c) if (b + 2.0 * c - 1.0).abs() < 1e-15 => 2,
                    _ => 1,
                };
                let smooth = if (*b, *c) == (1.0, 0.0) { 2 } else { 1 };
                Ok(Parts::new(
                    format!(":{b},{c}"),
                    Shape::Pieces(Pieces::bc_spline(*b, *c)),
                    Some(order),
                    Some(smooth),
                ))
            }
            _ => Err("two numbers from 0 to 3, such as bc-spline:1/3,1/3"),
        },
    },
    Family {
        name: "quintic",
        parameters: "",
        listed: &["quintic"],
        about: "smooth quintic convolution over six points",
        // Meijering, Zuiderveld and Viergever 1999, IEEE Trans. Image Process. 8(2):192-201, alpha = 3/64.
        build: |p| {
            let pieces = Pieces::from_even(
                &[
                    &[64, 0, -136, 0, 126, -54],
                    &[122, -165, -56, 170, -84, 13],
                    &[-486, 891, -648, 234, -42, 3],
                ],
                64,
            );
            none(p, Parts::new("", Shape::Pieces(pieces), Some(3), Some(3)))
        },
    },
    Family {
        name: "septic",
        parameters: "",
        listed: &["septic"],
        about: "smooth septic convolution over eight points",
        // The same paper, alpha = -71/83232.
        build: |p| {
            let pieces = Pieces::from_even(
                &[
                    &[83232, 0, -173328, 0, 134200, 0, -66117, 22013],
                    &[6216, 438956, -1189728, 1193220, -558240, 114996, -4293, -1127],
                    &[2744520, -7935956, 9558912, -6252540, 2408920, -548436, 68493, -3627],
                    &[872448, -1599488, 1254144, -545280, 142000, -22152, 1917, -71],
                ],
                83232,
            );
            none(p, Parts::new("", Shape::Pieces(pieces), Some(3), Some(5)))
        },
    },
    Family {
        name: "lagrange",
        parameters: "POINTS",
        listed: &["lagrange:3", "lagrange:4", "lagrange:6", "lagrange:8"],
        about: "the polynomial through the 2 to 12 nearest samples",
        build: |p| {
            let n = whole(p, 2, 12).ok_or("a whole number of points from 2 to 12, such as lagrange:4")?;
            let smooth = if n.is_multiple_of(2) { 0 } else { -1 };
            Ok(Parts::new(format!(":{n}"), Shape::Pieces(Pieces::lagrange(n)), Some(n as u32), Some(smooth)))
        },
    },
    Family {
        name: "lanczos",
        parameters: "LOBES",
        listed: &["lanczos:2", "lanczos:3", "lanczos:4", "lanczos:5"],
        about: "sinc under the central lobe of a wider sinc, 2 to 8 lobes",
        build: |p| {
            let radius = whole(p, 2, 8).ok_or("a whole number of lobes from 2 to 8, such as lanczos:3")?;
            let shape = Shape::Windowed { radius, window: Window::Lanczos };
            Ok(Parts::new(format!(":{radius}"), shape, Some(1), Some(1)))
        },
    },
    Family {
        name: "hann",
        parameters: "TAPS",
        listed: &["hann:6", "hann:8"],
        about: "sinc under a raised cosine, an even number of taps",
        build: |p| {
            let taps = whole(p, 2, 64)
                .filter(|t| t.is_multiple_of(2))
                .ok_or("an even number of taps from 2 to 64, such as hann:6")?;
            let order = if taps >= 4 { 2 } else { 1 };
            let shape = Shape::Windowed { radius: taps / 2, window: Window::Hann };
            Ok(Parts::new(format!(":{taps}"), shape, Some(order), Some(2)))
        },
    },
    Family {
        name: "kaiser",
        parameters: "TAPS,BETA",
        listed: &["kaiser:6,4", "kaiser:8,6", "kaiser:12,8"],
        about: "sinc under Kaiser's window, an even number of taps",
        build: |p| match p {
            [taps, beta] if (0.0..=50.0).contains(beta) => {
                let taps = whole(&[*taps], 2, 64)
                    .filter(|t| t.is_multiple_of(2))
                    .ok_or("an even number of taps from 2 to 64")?;
                let shape = Shape::Windowed { radius: taps / 2, window: Window::Kaiser(*beta) };
                Ok(Parts::new(format!(":{taps},{beta}"), shape, Some(1), Some(0)))
            }
            _ => Err("an even number of taps from 2 to 64 and beta from 0 to 50, such as kaiser:8,6"),
        },
    },
    Family {
        name: "bspline",
        parameters: "DEGREE",
        listed: &["bspline:2", "bspline:3", "bspline:4", "bspline:5", "bspline:7", "bspline:9"],
        about: "the interpolating B-spline, degree 0 to 9, with prefilter",
        build: |p| {
            let n = whole(p, 0, 9).ok_or("a degree from 0 to 9, such as bspline:3")?;
            let parts = Parts::new(
                format!(":{n}"),
                Shape::Pieces(Pieces::b_spline(n)),
                Some(n as u32 + 1),
                Some(n as i32 - 1),
            );
            Ok(if n >= 2 { parts.prefiltered() } else { parts })
        },
    },
    Family {
        name: "omoms",
        parameters: "DEGREE",
        listed: &["omoms:3", "omoms:5"],
        about: "least error of its support, degree 3 or 5, with prefilter",
        build: |p| match whole(p, 3, 5) {
            Some(3) => {
                Ok(Parts::new(":3", Shape::Pieces(Pieces::o_moms(3, &[42])), Some(4), Some(0)).prefiltered())
            }
            Some(5) => Ok(Parts::new(":5", Shape::Pieces(Pieces::o_moms(5, &[33, 7920])), Some(6), Some(0))
                .prefiltered()),
            _ => Err("degree 3 or 5, such as omoms:3"),
        },
    },
    Family {
        name: "shifted-linear",
        parameters: "",
        listed: &["shifted-linear"],
        about: "linear between shifted knots, with a one-sided prefilter; moves content a little",
        // Blu, Thevenaz and Unser 2004, IEEE Trans. Image Process. 13(5):710-719: tau = (1 - 1/sqrt 3) / 2.
        build: |p| {
            let centre = 0.5 * (1.0 - 1.0 / 3f64.sqrt());
            let pieces = Pieces { centre, ..Pieces::b_spline(1) };
            none(p, Parts::new("", Shape::Pieces(pieces), Some(2), Some(0)).prefiltered())
        },
    },
    Family {
        name: "sinc",
        parameters: "",
        listed: &["sinc"],
        about: "exact for band-limited lines, by the discrete Fourier transform",
        build: |p| none(p, Parts::new("", Shape::Sinc, None, None)),
    },
    Family {
        name: "polynomial",
        parameters: "",
        listed: &["polynomial"],
        about: "the one polynomial through all samples of a line, up to 64; may swing wildly near the ends",
        build: |p| none(p, Parts::new("", Shape::Polynomial, None, None)),
    },
    Family {
        name: "area",
        parameters: "",
        listed: &["area"],
        about: "exact overlap of output and input pixels",
        build: |p| none(p, Parts::new("", Shape::Area, Some(2), Some(0))),
    },
];

pub(super) fn parse(text: &str) -> Result<Kernel> {
    let (name, parameters) = match text.split_once(':') {
        Some((n, p)) => (n, Some(p)),
        None => (text, None),
    };
    let Some(family) = FAMILIES.iter().find(|f| f.name == name) else {
        return Err(Error::usage(format!("unknown kernel \"{text}\""), suggestion(name)));
    };
    let numbers: Result<Vec<f64>, _> = parameters
        .map(|p| p.split(',').map(|v| number(v.trim()).ok_or(())).collect())
        .unwrap_or_else(|| Ok(Vec::new()));
    let parts = numbers.map_err(|()| "numbers after the colon").and_then(|n| (family.build)(&n)).map_err(
        |needs| {
            Error::usage(
                format!("kernel \"{text}\": \"{name}\" takes {needs}"),
                "`regauge kernels` lists them all",
            )
        },
    )?;
    let reproduces_samples = match &parts.shape {
        Shape::Pieces(p) => {
            let (first, s) = split(-p.centre, p.taps);
            (0..p.taps).all(|m| {
                let wanted = if first + m as i64 == 0 { 1.0 } else { 0.0 };
                (p.weight(m, s) - wanted).abs() < 1e-12
            })
        }
        _ => true,
    };
    Ok(Kernel {
        name: format!("{name}{}", parts.suffix),
        shape: parts.shape,
        prefiltered: parts.prefiltered,
        reproduces_samples,
        order: parts.order,
        regularity: parts.regularity,
    })
}

/// A number, or a fraction such as 1/3.
fn number(text: &str) -> Option<f64> {
    let parse = |t: &str| t.trim().parse::<f64>().ok();
    let v = match text.split_once('/') {
        Some((n, d)) => parse(n)? / parse(d)?,
        None => parse(text)?,
    };
    v.is_finite().then_some(v)
}

/// The nearest known name, or where to find them.
fn suggestion(name: &str) -> String {
    let near = FAMILIES
        .iter()
        .map(|f| (distance(name, f.name), f))
        .min_by_key(|(d, _)| *d)
        .filter(|(d, f)| *d <= 1 + f.name.len().max(name.len()) / 3);
    match near {
        Some((_, f)) if f.parameters.is_empty() => {
            format!("did you mean \"{}\"? `regauge kernels` lists them all", f.name)
        }
        Some((_, f)) => {
            format!("did you mean \"{}:{}\"? `regauge kernels` lists them all", f.name, f.parameters)
        }
        None => "`regauge kernels` lists them all".into(),
    }
}

/// Edits between two words (Levenshtein 1966), case apart.
fn distance(a: &str, b: &str) -> usize {
    let (a, b): (Vec<char>, Vec<char>) =
        (a.to_lowercase().chars().collect(), b.to_lowercase().chars().collect());
    let mut row: Vec<usize> = (0..=b.len()).collect();
    for i in 0..a.len() {
        let mut left_up = row[0];
        row[0] = i + 1;
        for j in 0..b.len() {
            let up = row[j + 1];
            row[j + 1] = (left_up + usize::from(a[i] != b[j])).min(up + 1).min(row[j] + 1);
            left_up = up;
        }
    }
    row[b.len()]
}
