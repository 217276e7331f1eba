//! How a raster lies on the grid that it goes onto: by its world, or by a map file.

use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::map::{Map, MapFile};
use std::path::Path;

/// From target positions to positions in the raster.
///
/// `name` is what messages call the target.
///
/// # Errors
/// When the map or the worlds do not fit the grids.
pub fn way_back(path: &Path, grid: &Grid, file: Option<&MapFile>, target: &Grid, name: &str) -> Result<Map> {
    let Some(file) = file else {
        target.check_same_crs(grid, (name, &path.display().to_string()))?;
        if target.world.is_some() && grid.world.is_none() {
            return Err(Error::unfit(
                format!("{} has no place in the world, {name} has", path.display()),
                "give it a --map, or a georeference",
            ));
        }
        return target.to(grid).map_err(|e| about(path, e));
    };
    let map = file.map();
    let onto_reference = match &file.reference {
        // A reference without a place is known by its size; its pixels are then the target's own.
        Some(r) if r.world.is_none() && target.world.is_some() => {
            if (r.rows, r.columns) != (target.rows, target.columns) {
                return Err(Error::unfit(
                    format!(
                        "the map for {} refers to a grid of {} x {} pixels without a place in the world, {name} has {} x {}",
                        path.display(),
                        r.rows,
                        r.columns,
                        target.rows,
                        target.columns
                    ),
                    "use --onto with the map's reference",
                ));
            }
            Map::IDENTITY
        }
        Some(r) => {
            target.check_same_crs(r, (name, "the map's reference"))?;
            target.to(r).map_err(|e| about(path, e))?
        }
        None => Map::IDENTITY,
    };
    let moving = match &file.moving {
        Some(m) if m != grid => {
            if m.world.is_none() || grid.world.is_none() {
                if (m.rows, m.columns) != (grid.rows, grid.columns) {
                    return Err(Error::unfit(
                        format!(
                            "the map was made for a raster of {} x {} pixels, {} has {} x {}",
                            m.rows,
                            m.columns,
                            path.display(),
                            grid.rows,
                            grid.columns
                        ),
                        "give the map that belongs to this raster",
                    ));
                }
                Map::IDENTITY
            } else {
                m.to(grid).map_err(|e| about(path, e))?
            }
        }
        _ => Map::IDENTITY,
    };
    Ok(onto_reference.then(&map.invert()?).then(&moving))
}

/// Turns an error about a grid or map into one that names the file.
pub fn about(path: &Path, e: Error) -> Error {
    match e {
        Error::Unfit { problem, mend } => {
            Error::Unfit { problem: format!("{}: {problem}", path.display()), mend }
        }
        other => other,
    }
}
