//! What a job knows of noise, and the planes that it writes beside its output: sigma and coverage.

use super::Conduct;
use crate::error::{Error, Result};
use crate::raster::{self, Collected, Header, MemorySink, MissingCodes, SampleType, Samples, Sink, Window};
use crate::resample::{Block, Noise};
use serde::{Deserialize, Deserializer, Serialize, Serializer};
use std::path::{Path, PathBuf};

/// Where the standard uncertainty of samples comes from: a number, `poisson:GAIN,READ`, or a raster file.
#[derive(Clone, Debug, PartialEq)]
pub enum SigmaFrom {
    /// The same everywhere, in the unit of the samples.
    Number(f64),
    /// Electrons a count, and electrons of reading noise: variance max(v, 0) / gain + (read / gain)^2.
    Poisson(f64, f64),
    /// A raster of the input's size, with one band for all or one for each.
    File(PathBuf),
}

impl std::fmt::Display for SigmaFrom {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            SigmaFrom::Number(v) => write!(f, "{v}"),
            SigmaFrom::Poisson(gain, read) => write!(f, "poisson:{gain},{read}"),
            SigmaFrom::File(path) => write!(f, "{}", path.display()),
        }
    }
}

impl std::str::FromStr for SigmaFrom {
    type Err = Error;
    fn from_str(s: &str) -> Result<Self> {
        if let Ok(v) = s.parse::<f64>() {
            return if v >= 0.0 && v.is_finite() {
                Ok(SigmaFrom::Number(v))
            } else {
                Err(Error::usage(
                    format!("--sigma {s}: an uncertainty is not negative"),
                    "such as --sigma 0.5",
                ))
            };
        }
        let Some(numbers) = s.strip_prefix("poisson:") else { return Ok(SigmaFrom::File(s.into())) };
        let mut parts = numbers.split(',').map(|p| p.trim().parse::<f64>());
        match (parts.next(), parts.next(), parts.next()) {
            (Some(Ok(gain)), Some(Ok(read)), None)
                if gain > 0.0 && read >= 0.0 && gain.is_finite() && read.is_finite() =>
            {
                Ok(SigmaFrom::Poisson(gain, read))
            }
            _ => Err(Error::usage(
                format!(
                    "--sigma {s}: two numbers are needed, electrons a count and electrons of reading noise"
                ),
                "such as --sigma poisson:2.2,5",
            )),
        }
    }
}

impl Serialize for SigmaFrom {
    fn serialize<S: Serializer>(&self, s: S) -> Result<S::Ok, S::Error> {
        s.collect_str(self)
    }
}

impl<'de> Deserialize<'de> for SigmaFrom {
    fn deserialize<D: Deserializer<'de>>(d: D) -> Result<Self, D::Error> {
        String::deserialize(d)?.parse().map_err(serde::de::Error::custom)
    }
}

impl SigmaFrom {
    /// The noise of a raster of this header.
    ///
    /// # Errors
    /// When the file cannot be read or does not fit the raster.
    pub fn open(&self, header: &Header) -> Result<Noise> {
        Ok(match self {
            SigmaFrom::Number(v) => Noise::Even(*v),
            SigmaFrom::Poisson(gain, read) => Noise::Poisson { gain: *gain, read: *read },
            SigmaFrom::File(path) => {
                let source = raster::open(path)?;
                let own = source.header();
                let (rows, columns) = (header.grid.rows, header.grid.columns);
                if (own.grid.rows, own.grid.columns) != (rows, columns)
                    || (own.bands != 1 && own.bands != header.bands)
                {
                    return Err(Error::unfit(
                        format!(
                            "{}: {} x {} pixels in {} bands are no uncertainties for {rows} x {columns} in {}",
                            path.display(),
                            own.grid.rows,
                            own.grid.columns,
                            own.bands,
                            header.bands
                        ),
                        "give a raster of the input's size, with one band or as many as the input",
                    ));
                }
                let codes = MissingCodes { codes: own.missing.into_iter().filter(|c| !c.is_nan()).collect() };
                Noise::Plane(source.into(), codes)
            }
        })
    }
}

/// The planes beside an output.
#[derive(Default)]
pub(super) struct Planes {
    sigma: Option<(Box<dyn Sink>, SampleType)>,
    coverage: Option<Box<dyn Sink>>,
    /// Of u8, 1 where an output is missing.
    missing: Option<Box<dyn Sink>>,
}

impl Planes {
    /// Starts the files.
    pub fn create(header: &Header, conduct: &Conduct) -> Result<Self> {
        let start = |path: &PathBuf, header: &Header| raster::create(path, header, conduct.overwrite);
        let own = plane_header(header, sigma_type(header));
        let sigma = conduct.sigma_out.as_ref().map(|p| start(p, &own)).transpose()?;
        let coverage = conduct.coverage.as_ref().map(|p| start(p, &plane_header(header, SampleType::F32)));
        let sigma = sigma.map(|s| (s, own.sample_type));
        Ok(Planes { sigma, coverage: coverage.transpose()?, missing: None })
    }

    /// Refuses, before any work, a file that cannot hold such a plane.
    pub fn check(path: &Path, header: &Header) -> Result<()> {
        raster::check_writable(path, &plane_header(header, SampleType::F32))
    }

    /// A plane of sigma only, which takes f64.
    pub fn of_sigma(sink: Option<Box<dyn Sink>>) -> Self {
        Planes { sigma: sink.map(|s| (s, SampleType::F64)), ..Planes::default() }
    }

    /// Planes in memory, as wanted, and where they are found afterwards: sigma, coverage, missing.
    pub fn in_memory(header: &Header, wants: (bool, bool, bool)) -> (Self, [Option<Collected>; 3]) {
        let start = |wanted: bool, sample_type| {
            let made = wanted.then(|| MemorySink::new(plane_header(header, sample_type)));
            made.map_or((None, None), |(sink, found)| (Some(Box::new(sink) as Box<dyn Sink>), Some(found)))
        };
        let own = sigma_type(header);
        let (sigma, a) = start(wants.0, own);
        let (coverage, b) = start(wants.1, SampleType::F32);
        let (missing, c) = start(wants.2, SampleType::U8);
        (Planes { sigma: sigma.map(|s| (s, own)), coverage, missing }, [a, b, c])
    }

    /// Starts one file of f32.
    pub fn plane(path: &Path, header: &Header, overwrite: bool) -> Result<Box<dyn Sink>> {
        raster::create(path, &plane_header(header, SampleType::F32), overwrite)
    }

    /// Bytes that the planes take for each sample.
    pub fn bytes(header: &Header, conduct: &Conduct) -> u64 {
        let of_sigma = if conduct.sigma_out.is_some() { sigma_type(header).bytes() } else { 0 };
        (of_sigma + if conduct.coverage.is_some() { 4 } else { 0 }) as u64
    }

    pub fn alignment(&self) -> usize {
        let sigma = self.sigma.as_ref().map_or(1, |s| s.0.alignment());
        sigma.max(self.coverage.as_ref().map_or(1, |s| s.alignment()))
    }

    pub fn wants_sigma(&self) -> bool {
        self.sigma.is_some()
    }

    pub fn wants_coverage(&self) -> bool {
        self.coverage.is_some()
    }

    pub fn wants_missing(&self) -> bool {
        self.missing.is_some()
    }

    pub fn write(&mut self, block: &Block) -> Result<()> {
        if let Some(sigma) = &block.sigma {
            self.write_sigma(&block.window, sigma)?;
        }
        if let (Some(sink), Some(coverage)) = (&mut self.coverage, &block.coverage) {
            sink.write(&block.window, &Samples::F32(coverage.clone()))?;
        }
        if let (Some(sink), Some(missing)) = (&mut self.missing, &block.missing) {
            sink.write(&block.window, &Samples::U8(missing.iter().map(|m| u8::from(*m)).collect()))?;
        }
        Ok(())
    }

    pub fn write_sigma(&mut self, window: &Window, sigma: &[f64]) -> Result<()> {
        let Some((sink, sample_type)) = &mut self.sigma else { return Ok(()) };
        let samples = match sample_type {
            SampleType::F64 => Samples::F64(sigma.to_vec()),
            _ => Samples::F32(sigma.iter().map(|v| *v as f32).collect()),
        };
        sink.write(window, &samples)
    }

    pub fn finish(self) -> Result<()> {
        if let Some((sink, _)) = self.sigma {
            sink.finish()?;
        }
        self.coverage.map_or(Ok(()), |sink| sink.finish())?;
        self.missing.map_or(Ok(()), |sink| sink.finish())
    }
}

/// f64 where the output is; f32 is more than any uncertainty deserves otherwise.
fn sigma_type(header: &Header) -> SampleType {
    if header.sample_type == SampleType::F64 { SampleType::F64 } else { SampleType::F32 }
}

/// The output's header for floating-point samples, NaN for what is missing.
fn plane_header(header: &Header, sample_type: SampleType) -> Header {
    let mut own = Header { sample_type, missing: None, ..header.clone() };
    // A colour table, and a predictor for whole numbers, belong to the output's own samples.
    own.storage.color_map.clear();
    own.storage.photometric = None;
    own.storage.predictor = 1;
    own
}
