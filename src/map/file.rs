//! Map files: JSON, moving -> reference, with both grids named.

use super::Map;
use crate::error::{Error, Result};
use crate::grid::Grid;
use serde::{Deserialize, Serialize};
use std::path::Path;

/// A map as it stands in a file.
///
/// ```json
/// {"model": "affine", "matrix": [[1, 0, 2.5], [0, 1, -1], [0, 0, 1]],
///  "moving": {"rows": 200, "columns": 300}, "reference": {"rows": 200, "columns": 300}}
/// ```
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct MapFile {
    /// `shift`, `rigid`, `similarity`, `affine` or `projective`.
    pub model: String,
    /// 3 x 3 on (row, column, 1): a position in the moving raster to the same place in the reference.
    pub matrix: [[f64; 3]; 3],
    /// The grid of the raster that moves.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub moving: Option<Grid>,
    /// The grid that it moves onto.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub reference: Option<Grid>,
    /// Covariance of the parameters, where the map was measured.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub covariance: Option<Vec<Vec<f64>>>,
    /// Whether the measurement can be trusted; absent for a map that was told.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub trusted: Option<bool>,
}

impl MapFile {
    /// Reads and checks a map file.
    ///
    /// # Errors
    /// When the file is missing, is not such JSON, names an unknown model, or its matrix has no way back.
    pub fn read(path: &Path) -> Result<Self> {
        let text = std::fs::read_to_string(path).map_err(|e| Error::io(path, "reading the map", e))?;
        let file: MapFile = serde_json::from_str(&text).map_err(|e| {
            Error::malformed(path, format!("line {}, column {}", e.line(), e.column()), e.to_string())
        })?;
        const MODELS: [&str; 5] = ["shift", "rigid", "similarity", "affine", "projective"];
        if !MODELS.contains(&file.model.as_str()) {
            return Err(Error::unsupported(
                path,
                format!("unknown model \"{}\"", file.model),
                format!("use one of {}", MODELS.join(", ")),
            ));
        }
        let map = file.map();
        if file.model != "projective" && !map.is_affine() {
            return Err(Error::malformed(
                path,
                "matrix",
                format!("the last row of model \"{}\" must be [0, 0, 1]", file.model),
            ));
        }
        map.invert().map_err(|e| Error::malformed(path, "matrix", e.to_string()))?;
        for grid in [&file.moving, &file.reference].into_iter().flatten() {
            grid.check().map_err(|e| Error::malformed(path, "grid", e.to_string()))?;
        }
        Ok(file)
    }

    /// The map, from moving to reference positions.
    pub fn map(&self) -> Map {
        Map { matrix: self.matrix }
    }
}
