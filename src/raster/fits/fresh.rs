//! World coordinates for a grid that no carried card describes: from another format, or laid there by a map.

use super::cards::{padded, real, text};
use super::projection;
use crate::grid::Grid;

/// Units of length and angle as FITS writes them; another unit is a comment, which no reader trips over.
fn unit_cards(unit: &str) -> Vec<String> {
    let short = match unit {
        "metre" | "meter" => "m",
        "µm" | "μm" => "um",
        "degree" | "degrees" => "deg",
        "Å" => "Angstrom",
        u => u,
    };
    const KNOWN: &[&str] = &[
        "km", "m", "cm", "mm", "um", "nm", "pm", "Angstrom", "deg", "arcmin", "arcsec", "mas", "rad", "s",
        "Hz",
    ];
    if KNOWN.contains(&short) {
        return vec![text("CUNIT1", short), text("CUNIT2", short)];
    }
    vec![padded(&format!("COMMENT unit of the world coordinates: {unit}"))]
}

/// Cards for a grid that the carried ones do not describe.
pub fn of_grid(grid: &Grid) -> Vec<String> {
    let Some(w) = grid.world else { return Vec::new() };
    let unit = grid.unit.as_deref().map(unit_cards).unwrap_or_default();
    let mut out = Vec::new();
    if let Some(projected) = grid.crs.as_deref().and_then(projection::cards) {
        out.extend(projected);
        // CD (p - CRPIX) vanishes at the reference pixel.
        let det = w[0][0] * w[1][1] - w[0][1] * w[1][0];
        let zero = [w[0][1] * w[1][2] - w[1][1] * w[0][2], w[1][0] * w[0][2] - w[0][0] * w[1][2]];
        out.extend([0, 1].map(|i| real(&format!("CRPIX{}", i + 1), zero[i] / det + 1.0)));
    } else {
        for (i, row) in w.iter().enumerate() {
            out.push(text(&format!("CTYPE{}", i + 1), "LINEAR"));
            out.push(real(&format!("CRPIX{}", i + 1), 1.0));
            out.push(real(&format!("CRVAL{}", i + 1), row[2]));
        }
        out.extend(grid.crs.as_deref().map(|crs| text("WCSNAME", crs)));
    }
    out.extend(unit);
    for (i, row) in w.iter().enumerate() {
        out.extend([0, 1].map(|j| real(&format!("CD{}_{}", i + 1, j + 1), row[j])));
    }
    out
}
