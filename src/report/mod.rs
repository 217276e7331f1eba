//! Reports: the ledger, and pictures.

mod audit;
mod audit_words;
pub mod colour;
mod display;
mod foot;
mod ledger;
pub mod maps;
mod page;
pub mod palette;
pub mod picture;
mod relief;
mod sheet;
mod summary;
pub mod text;
mod ticks;

pub use audit::{
    Audit, AuditPixels, Check, Clipping, DisplacementField, Gaps, MeasuredBlur, MeasuredDisplacement,
    MeasuredTransfer, Relation, Spectrum, Tile,
};
pub use display::Display;
pub use ledger::{
    Blur, Centroid, Displacement, Flux, KernelEntry, Ledger, LocalClosure, Noise, Pixels, RasterEntry,
    Ringing, SumUnderestimated, Time, Transfer, peak_memory_bytes, write_whole,
};
pub use maps::{Group, MapOptions, Panel, Scale, draw_map, draw_maps};
pub use page::{BandPictures, RunPictures, audit_page, difference_page, ledger_page};
pub use palette::Palette;
pub use picture::Picture;
