//! Reports: the ledger, and pictures.

mod ledger;
mod summary;

pub use ledger::{
    Blur, Centroid, Displacement, Flux, KernelEntry, Ledger, Noise, Pixels, RasterEntry, Ringing, Time,
    Transfer, peak_memory_bytes, write_whole,
};
