//! TIFF and BigTIFF, with OGC GeoTIFF keys and OME-XML.

mod codec;
mod geo;
mod ome;
mod read;
mod tags;
mod write;

pub use codec::Compression;
pub use geo::GeoKeys;
pub use read::TiffSource;
pub(super) use read::Word;
pub use write::{TiffSink, check_writable};
