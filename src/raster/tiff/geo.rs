//! OGC GeoTIFF 1.1 (19-008r4): where the pixels lie, and in which system.
//!
//! The model tags speak of raster space, where a pixel-is-area raster begins at (0, 0) with its outer corner and a
//! pixel-is-point raster with the centre of its first pixel. [`Grid::world`] always speaks of pixel centres, so half a
//! pixel lies between the two for area rasters and nothing for point rasters.

use super::tags::{self, Directories};
use crate::error::Result;
use crate::grid::{Grid, Sampling, World};

const MODEL_TYPE: u16 = 1024;
const RASTER_TYPE: u16 = 1025;
const CITATION: u16 = 1026;
const GEODETIC_CRS: u16 = 2048;
const PROJECTED_CRS: u16 = 3072;
const USER_DEFINED: u16 = 32767;

/// The key directory as the file has it.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct GeoKeys {
    /// Tag 34735: header of four, then (key, location, count, value).
    pub directory: Vec<u16>,
    /// Tag 34736.
    pub doubles: Vec<f64>,
    /// Tag 34737.
    pub ascii: String,
}

impl GeoKeys {
    /// The value of a key that is a short.
    fn short(&self, key: u16) -> Option<u16> {
        self.directory.get(4..)?.as_chunks::<4>().0.iter().find(|e| e[0] == key && e[1] == 0).map(|e| e[3])
    }

    fn text(&self, key: u16) -> Option<&str> {
        let entry = self
            .directory
            .get(4..)?
            .as_chunks::<4>()
            .0
            .iter()
            .find(|e| e[0] == key && e[1] == tags::GEO_ASCII)?;
        let (count, start) = (usize::from(entry[2]), usize::from(entry[3]));
        self.ascii.get(start..start + count).map(|t| t.trim_end_matches(['|', '\0']))
    }

    /// `EPSG:n`, or for a system the user defined a name made of its citation and keys.
    fn crs(&self) -> Option<String> {
        let code = [PROJECTED_CRS, GEODETIC_CRS].iter().filter_map(|k| self.short(*k)).find(|c| *c != 0)?;
        if code != USER_DEFINED {
            return Some(format!("EPSG:{code}"));
        }
        // Two such systems are the same if all their keys are, the raster type apart.
        let keys = self.directory.get(4..)?.as_chunks::<4>().0.iter().filter(|e| e[0] != RASTER_TYPE);
        let mut hash = 0xcbf2_9ce4_8422_2325u64;
        let mut eat = |v: u64| hash = (hash ^ v).wrapping_mul(0x0000_0100_0000_01b3);
        keys.flatten().for_each(|v| eat(u64::from(*v)));
        self.doubles.iter().for_each(|v| eat(v.to_bits()));
        self.ascii.bytes().for_each(|v| eat(u64::from(v)));
        Some(format!("user-defined {} ({hash:016x})", self.text(CITATION).unwrap_or("system")))
    }

    /// Keys for an EPSG code. Codes 4000 to 4999 are geodetic (longitude, latitude) as a rule of that register, the others
    /// projected (common practice, no source).
    fn for_epsg(code: u16) -> Self {
        let geodetic = (4000..5000).contains(&code);
        let (model, key) = if geodetic { (2, GEODETIC_CRS) } else { (1, PROJECTED_CRS) };
        let entries = [[MODEL_TYPE, 0, 1, model], [RASTER_TYPE, 0, 1, 1], [key, 0, 1, code]];
        let directory =
            [1, 1, 1, entries.len() as u16].into_iter().chain(entries.into_iter().flatten()).collect();
        GeoKeys { directory, ..GeoKeys::default() }
    }

    /// The same keys with the raster type set.
    fn with_sampling(&self, sample: Sampling) -> Self {
        let mut entries: Vec<[u16; 4]> =
            self.directory.get(4..).unwrap_or_default().as_chunks::<4>().0.to_vec();
        entries.retain(|e| e[0] != RASTER_TYPE);
        entries.push([RASTER_TYPE, 0, 1, if sample == Sampling::Point { 2 } else { 1 }]);
        entries.sort_by_key(|e| e[0]);
        let mut directory = self.directory.get(..3).map_or_else(|| vec![1, 1, 1], <[u16]>::to_vec);
        directory.push(entries.len() as u16);
        directory.extend(entries.iter().flatten());
        GeoKeys { directory, ..self.clone() }
    }
}

/// Reads place, sampling and CRS of the first page into the grid; returns the keys to carry.
pub fn read(
    directories: &mut Directories,
    grid: &mut Grid,
    notes: &mut Vec<String>,
) -> Result<Option<GeoKeys>> {
    let directory: Vec<u16> = directories
        .integers(0, tags::GEO_DIRECTORY)?
        .into_iter()
        .map(|v| u16::try_from(v).unwrap_or(0))
        .collect();
    let keys = (directory.len() >= 4).then(|| -> Result<GeoKeys> {
        Ok(GeoKeys {
            directory,
            doubles: directories.doubles(0, tags::GEO_DOUBLES)?,
            ascii: directories.text(0, tags::GEO_ASCII)?.unwrap_or_default(),
        })
    });
    let keys = keys.transpose()?;
    if let Some(keys) = &keys {
        grid.crs = keys.crs();
        if keys.short(RASTER_TYPE) == Some(2) {
            grid.sample = Sampling::Point;
        }
    }
    // Raster coordinates of the first pixel's centre.
    let centre = if grid.sample == Sampling::Point { 0.0 } else { 0.5 };
    let scale = directories.doubles(0, tags::PIXEL_SCALE)?;
    let tie = directories.doubles(0, tags::TIEPOINT)?;
    let matrix = directories.doubles(0, tags::TRANSFORMATION)?;
    let world: Option<World> = if let [a, b, _, d, e, f, _, h, ..] = matrix[..] {
        Some([[a, b, d + (a + b) * centre], [e, f, h + (e + f) * centre]])
    } else if let ([sx, sy, ..], [i, j, _, x, y, ..]) = (&scale[..], &tie[..]) {
        if tie.len() > 6 {
            notes.push(
                "only the first of several tiepoints was used; together with a pixel scale one is enough"
                    .into(),
            );
        }
        Some([[*sx, 0.0, x + (centre - i) * sx], [0.0, -sy, y - (centre - j) * sy]])
    } else {
        if tie.len() > 6 {
            notes.push("ground control points without a pixel scale were not used: the raster has no place in the world".into());
        }
        None
    };
    grid.world = world;
    if world.is_none() {
        grid.crs = None;
    }
    Ok(keys)
}

/// The tags that place a grid: pixel scale and tiepoint, or the matrix; and the keys.
pub struct Placed {
    /// Tag 33550.
    pub scale: Option<[f64; 3]>,
    /// Tag 33922.
    pub tie: Option<[f64; 6]>,
    /// Tag 34264.
    pub matrix: Option<[f64; 16]>,
    /// Tags 34735 to 34737.
    pub keys: Option<GeoKeys>,
}

/// Makes the tags for a grid; `carried` are the keys of the raster it came from, used if they name the same CRS.
///
/// `by_ome`: pixel size and unit stand in OME-XML, and need no keys.
pub fn place(grid: &Grid, carried: Option<&GeoKeys>, by_ome: bool) -> Placed {
    let mut placed = Placed { scale: None, tie: None, matrix: None, keys: None };
    let keys = match (&grid.crs, carried) {
        (Some(crs), Some(keys)) if keys.crs().as_ref() == Some(crs) => Some(keys.clone()),
        (Some(crs), _) => crs.strip_prefix("EPSG:").and_then(|c| c.parse().ok()).map(GeoKeys::for_epsg),
        // Keys without a CRS, or a point grid, still say what a sample stands for.
        (None, Some(keys)) if grid.world.is_some() && keys.crs().is_none() => Some(keys.clone()),
        (None, _)
            if grid.world.is_some() && (grid.sample == Sampling::Point || grid.unit.is_none() || !by_ome) =>
        {
            Some(GeoKeys::default())
        }
        _ => None,
    };
    let Some(w) = grid.world else { return placed };
    let Some(keys) = keys else { return placed };
    placed.keys = Some(keys.with_sampling(grid.sample));
    let centre = if grid.sample == Sampling::Point { 0.0 } else { 0.5 };
    // World coordinates of the origin of raster space.
    let x = w[0][2] - (w[0][0] + w[0][1]) * centre;
    let y = w[1][2] - (w[1][0] + w[1][1]) * centre;
    if w[0][1] == 0.0 && w[1][0] == 0.0 && w[0][0] > 0.0 && w[1][1] < 0.0 {
        placed.scale = Some([w[0][0], -w[1][1], 0.0]);
        placed.tie = Some([0.0, 0.0, 0.0, x, y, 0.0]);
    } else {
        let m = [[w[0][0], w[0][1], 0.0, x], [w[1][0], w[1][1], 0.0, y], [0.0; 4], [0.0, 0.0, 0.0, 1.0]];
        let mut flat = [0.0; 16];
        flat.iter_mut().zip(m.iter().flatten()).for_each(|(d, v)| *d = *v);
        placed.matrix = Some(flat);
    }
    placed
}
