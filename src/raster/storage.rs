//! How a file stores its samples, and the metadata that travels with them.

use super::tiff::{Compression, GeoKeys};

/// File formats.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Format {
    /// TIFF or BigTIFF.
    #[default]
    Tiff,
    /// NumPy's array file.
    Npy,
    /// A picture file: PNG, JPEG, PNM.
    Picture,
    /// FITS.
    Fits,
    /// No file: in memory.
    Memory,
}

/// How samples are stored, and what else a file carries. Copied to the output, which corrects it for its own grid.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Storage {
    /// Where it came from.
    pub format: Format,
    /// Pages; `bands` = pages x samples per pixel.
    pub pages: usize,
    /// Samples per pixel of a page.
    pub samples_per_pixel: usize,
    /// Whether the samples of a pixel lie in separate planes.
    pub planar: bool,
    /// Compression of chunks.
    pub compression: Compression,
    /// 1 none, 2 horizontal, 3 floating point.
    pub predictor: u16,
    /// Tag 262; `None`: chosen by the writer.
    pub photometric: Option<u16>,
    /// Tag 338.
    pub extra_samples: Vec<u16>,
    /// Tag 320.
    pub color_map: Vec<u16>,
    /// GeoTIFF keys.
    pub geo_keys: Option<GeoKeys>,
    /// Image description or OME-XML.
    pub description: Option<String>,
    /// Pixels per unit along columns and rows, and the unit (1 none, 2 inch, 3 centimetre).
    pub resolution: Option<(f64, f64, u16)>,
    /// Text tags that travel as they are.
    pub texts: Vec<(u16, String)>,
    /// FITS cards that travel, 80 characters each; those of the linear world coordinates are corrected on the way.
    pub cards: Vec<String>,
    /// Lengths of the axes behind rows and columns, for cubes of more than one; their product is the number of bands.
    pub planes: Vec<usize>,
    /// What the user should be told about what was not understood or not carried.
    pub notes: Vec<String>,
}
