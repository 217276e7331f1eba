//! Regauge puts rasters of measurements on a common grid and says what that cost.
//!
//! # Conventions
//! Positions are (row, column); the centre of the first pixel is (0, 0), its edges are at -0.5 and +0.5. World coordinates
//! are (x, y). Maps are 3 x 3 matrices on (row, column, 1). A positive shift moves content down and right, a positive
//! turn is counter-clockwise as displayed.
//!
//! # A tour
//! A [`Job`](job::Job) is one raster resampled onto one grid. Its plan ([`Plan`](resample::Plan)) picks a pass; an
//! [`Engine`](resample::Engine) carries it out block by block, from a [`Source`](raster::Source) to whatever takes the
//! blocks; the [`Ledger`](report::Ledger) tells what it cost. Every pass is judged by [`slow`], the direct sum.
//!
//! ```
//! use regauge::grid::Grid;
//! use regauge::map::Map;
//! use regauge::raster::{Header, Raster, SampleType, Samples};
//! use regauge::resample::{Engine, Outside, Plan, Rules};
//!
//! // A slope of 4 x 5 pixels, its content moved right by a quarter of a pixel.
//! let samples = Samples::F64((0..20).map(|i| f64::from(i % 5)).collect());
//! let source = Raster::new(Header::new(Grid::new(4, 5), 1, SampleType::F64), samples)?;
//! let rules = Rules { outside: Outside::Extend, extension: "point-symmetric".parse()?, ..Rules::default() };
//! // Passes ask for the way back: from output to input positions.
//! let back = Map::shift(0.0, -0.25);
//! let plan = Plan::new((4, 5), (4, 5), &back, &rules)?;
//! assert_eq!(plan.method(), "rows-and-columns");
//! let engine = Engine {
//!     source: &source,
//!     target: (4, 5),
//!     plan,
//!     rules: &rules,
//!     codes: Default::default(),
//!     sample_type: SampleType::F64,
//!     fill: None,
//!     extras: Default::default(),
//! };
//! engine.run(1, None, &mut |block| {
//!     let Samples::F64(values) = &block.samples else { unreachable!() };
//!     // A slope stays a slope, to rounding, up to its edges.
//!     assert!(values.iter().enumerate().all(|(i, v)| (v - ((i % 5) as f64 - 0.25)).abs() < 1e-12));
//!     Ok(())
//! })?;
//! # Ok::<(), regauge::Error>(())
//! ```
//!
//! # What must hold
//! f64 samples agree with a dense evaluation to 1e-12 of the largest value, f32 to 2e-6. The same bits come out for any number of
//! threads, any cut into blocks, any memory limit and any width of vectors. Where nothing need be done, samples are copied.
//! A missing sample never enters a sum. Nothing stands under an output's name but a complete file.

#[cfg(feature = "cli")]
pub mod cli;
pub mod error;
pub mod grid;
pub mod job;
pub mod kernel;
pub mod map;
pub mod measure;
pub mod pattern;
#[cfg(feature = "python")]
mod python;
pub mod raster;
mod real;
pub mod report;
pub mod resample;
pub mod simd;
pub mod slow;

pub use error::{Error, Result};
pub use real::Real;
