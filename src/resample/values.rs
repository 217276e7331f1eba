//! What a number is, and how its overshoot is held.

use crate::error::{Error, Result};
use serde::{Deserialize, Deserializer, Serialize, Serializer};

/// What a sample is.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub enum Values {
    /// A value per place: elevation, intensity per area.
    #[default]
    Density,
    /// A sum over the pixel: counts, flux.
    Total,
    /// A class code.
    Label,
    /// An angle or phase with this period.
    Cyclic(f64),
}

/// What holds overshoot.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Limit {
    /// Nothing.
    #[default]
    None,
    /// The range of the samples under the kernel's central 2 x 2 (and under the pixel, where it is larger). What exceeds it
    /// is cut off; of totals it is handed to the neighbours, so that the sum is kept.
    Neighbours,
}

impl std::fmt::Display for Values {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            Values::Density => f.write_str("density"),
            Values::Total => f.write_str("total"),
            Values::Label => f.write_str("label"),
            Values::Cyclic(period) => write!(f, "cyclic:{period}"),
        }
    }
}

impl std::str::FromStr for Values {
    type Err = Error;
    fn from_str(s: &str) -> Result<Self> {
        match s {
            "density" => Ok(Values::Density),
            "total" => Ok(Values::Total),
            "label" => Ok(Values::Label),
            _ => match s.strip_prefix("cyclic:").map(str::parse::<f64>) {
                Some(Ok(period)) if period.is_finite() && period > 0.0 => Ok(Values::Cyclic(period)),
                Some(_) => Err(Error::usage(
                    format!("\"{s}\": the period must be a positive number"),
                    "such as cyclic:360",
                )),
                None => Err(Error::usage(
                    format!("unknown values \"{s}\""),
                    "use density, total, label or cyclic:PERIOD (such as cyclic:360)",
                )),
            },
        }
    }
}

impl Serialize for Values {
    fn serialize<S: Serializer>(&self, s: S) -> Result<S::Ok, S::Error> {
        s.collect_str(self)
    }
}

impl<'de> Deserialize<'de> for Values {
    fn deserialize<D: Deserializer<'de>>(d: D) -> Result<Self, D::Error> {
        String::deserialize(d)?.parse().map_err(serde::de::Error::custom)
    }
}
