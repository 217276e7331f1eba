//! Resampling: a plan picked from grids, map and kernel, and the passes that carry it out.

pub mod axis;
mod beyond;
pub mod blocks;
mod chain;
mod conserve;
mod convert;
mod copy;
mod effective;
mod fourier;
mod gather;
mod least_squares;
mod limit;
mod majority;
mod overlap;
mod passes;
mod patch;
mod plan;
mod prepared;
mod rows_and_columns;
mod rules;
mod settle;
mod shear;
mod squares;
mod values;
mod variance;
pub mod weights;

pub use blocks::{Block, Engine, Extras, Runner};
pub use convert::{Counts, convert};
pub use effective::Effective;
pub use overlap::{Cells, corners};
pub use passes::Ranges;
pub use plan::{Plan, Size};

/// The symbol of the prefilter that solves the least-squares equations of a B-spline kernel.
pub fn gram_symbol(kernel: &crate::kernel::Kernel) -> Vec<f64> {
    least_squares::Projection::gram_symbol(kernel)
}
pub use rules::{Outside, Reduce, Rules};
pub use settle::Shifted;
pub use squares::Squares;
pub use values::{Limit, Values};
pub use variance::Noise;
