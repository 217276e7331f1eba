//! Resampling: a plan picked from grids, map and kernel, and the passes that carry it out.

mod rules;
pub use rules::{Outside, Reduce, Rules};
