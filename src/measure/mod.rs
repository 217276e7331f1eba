//! Measures: what a resampling does to signal, detail and noise. The ledger and the assay both ask here.

pub mod audit;
mod flux;
mod local;
mod response;
mod ringing;
mod sum;

pub use flux::{Balance, Frame, closure};
pub use local::Local;
pub use response::{AxisOperator, Costs, Pixel, measure_costs, transfer_curve};
pub use ringing::step_overshoot;
pub use sum::Sum;
