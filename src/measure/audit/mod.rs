//! What an audit measures on two rasters that show the same: displacement tile by tile, detail lost, what was folded.
//!
//! AFTER is judged against BEFORE brought onto AFTER's grid; everything is told in input pixels (BEFORE's).

mod cells;
mod curve;
mod field;
mod patch;
mod shift;
mod solve;
mod spectrum;
mod verdict;

pub use cells::{ClosureMap, Loss, LossKind};
pub use curve::{Curve, Ring, Sharpness};
pub use field::{Extent, Field, Vote, fit};
pub use shift::{Estimator, NoVote, Shift};
pub use spectrum::{Aliasing, Known, Spectra};
pub use verdict::{Kind, Verdict, judge, predict_corner_centres};
