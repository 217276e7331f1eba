//! Signal extension: what stands beyond the edge for the taps and for the prefilter alike.

use crate::error::{Error, Result};
use serde::{Deserialize, Serialize};

/// What stands beyond the edges of a line.
///
/// Shown for the row `a b c d`, for the row `a` alone, and far outside (`N` samples, any distance: the rules repeat or
/// go on for ever, they never run out after one or two widths).
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub enum Extension {
    /// Nothing there: `. . | a b c d | . .`; the weights of what is there are divided by their sum. One sample: itself,
    /// wherever a tap reaches it. Out of reach of every sample: missing.
    Open,
    /// Zeros: `0 0 | a b c d | 0 0`. One sample: `0 0 | a | 0 0`. Zero however far.
    Zero,
    /// A constant: `V V | a b c d | V V`. One sample: `V V | a | V V`. V however far.
    Constant(f64),
    /// The edge goes on: `a a | a b c d | d d`. One sample: `a a | a | a a`. The edge sample however far.
    Replicate,
    /// Mirrored at the outer edge of the edge pixel: `b a | a b c d | d c`. One sample: `a a | a | a a`. Period 2 N. The default.
    #[default]
    HalfSymmetric,
    /// Mirrored at the centre of the edge pixel: `c b | a b c d | c b`. One sample: `a a | a | a a`. Period 2 N - 2.
    WholeSymmetric,
    /// Turned about the edge sample: `2a-c 2a-b | a b c d | 2d-c 2d-b`; keeps a slope. One sample: `a a | a | a a`. Far outside
    /// the line's rise is added once a width.
    PointSymmetric,
    /// Round and round: `c d | a b c d | a b`. One sample: `a a | a | a a`. Period N.
    Periodic,
}

/// What stands at an extended position.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Place {
    /// The sample of that index.
    Sample(usize),
    /// A fixed number.
    Constant(f64),
    /// Nothing.
    Absent,
    /// `sign * f[index] + first * f[0] + last * f[N - 1]`.
    Turned {
        /// The mirrored sample.
        index: usize,
        /// +1 or -1.
        sign: f64,
        /// Factor of the first sample.
        first: f64,
        /// Factor of the last sample.
        last: f64,
    },
}

impl Extension {
    /// What stands at index `k` of a line of `n` samples (`n` at least 1).
    pub fn place(self, k: i64, n: usize) -> Place {
        let len = n as i64;
        if (0..len).contains(&k) {
            return Place::Sample(k as usize);
        }
        match self {
            Extension::Open => Place::Absent,
            Extension::Zero => Place::Constant(0.0),
            Extension::Constant(v) => Place::Constant(v),
            Extension::Replicate => Place::Sample(k.clamp(0, len - 1) as usize),
            Extension::Periodic => Place::Sample(k.rem_euclid(len) as usize),
            Extension::HalfSymmetric => {
                let p = k.rem_euclid(2 * len);
                Place::Sample(p.min(2 * len - 1 - p) as usize)
            }
            _ if n == 1 => Place::Sample(0),
            Extension::WholeSymmetric => {
                let p = k.rem_euclid(2 * len - 2);
                Place::Sample(p.min(2 * len - 2 - p) as usize)
            }
            Extension::PointSymmetric => {
                let period = 2 * len - 2;
                let (turns, p) = (k.div_euclid(period), k.rem_euclid(period));
                // A whole period adds twice the rise from the first to the last sample.
                let rise = 2.0 * turns as f64;
                if p < len {
                    Place::Turned { index: p as usize, sign: 1.0, first: -rise, last: rise }
                } else {
                    Place::Turned { index: (period - p) as usize, sign: -1.0, first: -rise, last: rise + 2.0 }
                }
            }
        }
    }
}

impl std::fmt::Display for Extension {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            Extension::Open => f.write_str("open"),
            Extension::Zero => f.write_str("zero"),
            Extension::Constant(v) => write!(f, "constant:{v}"),
            Extension::Replicate => f.write_str("replicate"),
            Extension::HalfSymmetric => f.write_str("half-symmetric"),
            Extension::WholeSymmetric => f.write_str("whole-symmetric"),
            Extension::PointSymmetric => f.write_str("point-symmetric"),
            Extension::Periodic => f.write_str("periodic"),
        }
    }
}

impl std::str::FromStr for Extension {
    type Err = Error;
    fn from_str(s: &str) -> Result<Self> {
        Ok(match s {
            "open" => Extension::Open,
            "zero" => Extension::Zero,
            "replicate" => Extension::Replicate,
            "half-symmetric" => Extension::HalfSymmetric,
            "whole-symmetric" => Extension::WholeSymmetric,
            "point-symmetric" => Extension::PointSymmetric,
            "periodic" => Extension::Periodic,
            _ => match s.strip_prefix("constant:").and_then(|v| v.parse::<f64>().ok()) {
                Some(v) if v.is_finite() => Extension::Constant(v),
                _ => {
                    return Err(Error::usage(
                        format!("unknown extension \"{s}\""),
                        "use open, zero, constant:V, replicate, half-symmetric, whole-symmetric, point-symmetric or periodic",
                    ));
                }
            },
        })
    }
}

impl Serialize for Extension {
    fn serialize<S: serde::Serializer>(&self, s: S) -> Result<S::Ok, S::Error> {
        s.collect_str(self)
    }
}

impl<'de> Deserialize<'de> for Extension {
    fn deserialize<D: serde::Deserializer<'de>>(d: D) -> Result<Self, D::Error> {
        String::deserialize(d)?.parse().map_err(serde::de::Error::custom)
    }
}
