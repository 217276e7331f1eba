//! FITS images (standard 4.0; Pence et al. 2010, A&A 524:A42): read and written by windows, in file order: the first row of
//! the array is the first of the file.

mod cards;
mod carry;
mod fresh;
mod projection;
mod read;
mod sip;
mod wcs;
mod write;

pub use read::FitsSource;
pub use write::{FitsSink, check_writable};
