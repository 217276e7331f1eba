//! World coordinates of FITS (Greisen and Calabretta 2002, A&A 395:1061): read into the grid, and corrected for a new one.
//!
//! Intermediate world coordinates are linear: CD (p - CRPIX), p counted from 1. Where the types name a projection, the
//! grid's world is these, and its reference system names the projection and where it touches; two such rasters meet only
//! if both agree. On writing only CRPIX and the matrix change: whatever is not linear stays right.

use super::cards::{Cards, keyword, real};
use crate::error::Result;
use crate::grid::{Grid, World};
use crate::map::Map;
use std::path::Path;

/// The matrix and reference pixel of one description; letter is empty or 'A' to 'Z'.
struct Linear {
    letter: String,
    reference: [f64; 2],
    matrix: [[f64; 2]; 2],
    /// Whether the matrix stands as CDi_j; else as CDELTi with or without PCi_j.
    as_cd: bool,
}

impl Linear {
    /// Reads one description; `None` if there is none.
    fn read(cards: &Cards, letter: &str, path: &Path) -> Result<Option<Self>> {
        let number = |key: String| cards.number(&(key + letter), path);
        let given = |stem: &str| {
            cards.cards.iter().any(|c| {
                let k = keyword(c);
                k.starts_with(stem) && k.len() <= stem.len() + 4 && k.ends_with(letter) && !k.contains('3')
            })
        };
        let mut cd = [[0.0; 2]; 2];
        let (mut any_cd, mut any_pc) = (false, false);
        let mut pc = [[1.0, 0.0], [0.0, 1.0]];
        for i in 0..2 {
            for j in 0..2 {
                if let Some(v) = number(format!("CD{}_{}", i + 1, j + 1))? {
                    (cd[i][j], any_cd) = (v, true);
                }
                if let Some(v) = number(format!("PC{}_{}", i + 1, j + 1))? {
                    (pc[i][j], any_pc) = (v, true);
                }
            }
        }
        let delta = [number("CDELT1".into())?, number("CDELT2".into())?];
        let reference = [number("CRPIX1".into())?, number("CRPIX2".into())?];
        let any = any_cd || any_pc || delta != [None; 2] || reference != [None; 2];
        if !any || !(given("CRPIX") || given("CDELT") || given("CD") || given("PC")) {
            return Ok(None);
        }
        let matrix = if any_cd {
            cd
        } else {
            let d = [delta[0].unwrap_or(1.0), delta[1].unwrap_or(1.0)];
            if !any_pc && let Some(turn) = number("CROTA2".into())? {
                let (sin, cos) = turn.to_radians().sin_cos();
                // The older form: a turn after the scale.
                [[d[0] * cos, -d[1] * sin], [d[0] * sin, d[1] * cos]]
            } else {
                [[d[0] * pc[0][0], d[0] * pc[0][1]], [d[1] * pc[1][0], d[1] * pc[1][1]]]
            }
        };
        let reference = [reference[0].unwrap_or(0.0), reference[1].unwrap_or(0.0)];
        Ok(Some(Linear { letter: letter.to_owned(), reference, matrix, as_cd: any_cd }))
    }

    /// From (column, row), counted from 0, to intermediate coordinates (x, y).
    fn world(&self) -> World {
        let at = |row: [f64; 2]| {
            let origin = row[0] * (1.0 - self.reference[0]) + row[1] * (1.0 - self.reference[1]);
            [row[0], row[1], origin]
        };
        [at(self.matrix[0]), at(self.matrix[1])]
    }
}

/// Whether a coordinate type names a projection, such as `RA---TAN`.
fn is_projected(ctype: &str) -> bool {
    ctype.len() >= 8 && ctype.as_bytes().get(4) == Some(&b'-')
}

/// Sets the grid's place from the primary description.
///
/// # Errors
/// When a card holds no number.
pub fn read(cards: &Cards, grid: &mut Grid, notes: &mut Vec<String>, path: &Path) -> Result<()> {
    if cards.cards.iter().any(|c| is_distortion(keyword(c))) {
        notes.push("distortions by pixel (SIP and lookup tables) are not carried over".into());
    }
    let Some(linear) = Linear::read(cards, "", path)? else { return Ok(()) };
    let m = linear.matrix;
    let det = m[0][0] * m[1][1] - m[0][1] * m[1][0];
    if det == 0.0 || !det.is_finite() {
        notes.push("the world coordinates' matrix has no inverse and was not used".into());
        return Ok(());
    }
    let mut world = linear.world();
    let types = [cards.text("CTYPE1").unwrap_or_default(), cards.text("CTYPE2").unwrap_or_default()];
    let value = [cards.number("CRVAL1", path)?.unwrap_or(0.0), cards.number("CRVAL2", path)?.unwrap_or(0.0)];
    if types.iter().any(|t| is_projected(t)) {
        let mut crs = format!("{} {} at {}, {}", types[0], types[1], value[0], value[1]);
        for key in ["RADESYS", "LONPOLE", "LATPOLE", "EQUINOX"] {
            let other = cards.number(key, path).ok().flatten().map(|v| v.to_string());
            if let Some(v) = cards.text(key).or(other) {
                crs += &format!(", {key} {v}");
            }
        }
        // Parameters of the projection belong to it as well.
        let parameters = cards.cards.iter().filter(|c| keyword(c).starts_with("PV")).count();
        if parameters > 0 {
            crs += &format!(", {parameters} parameters");
        }
        grid.crs = Some(crs);
    } else {
        world[0][2] += value[0];
        world[1][2] += value[1];
    }
    grid.world = Some(world);
    grid.unit = cards.text("CUNIT1").filter(|u| !u.is_empty());
    Ok(())
}

/// Cards that distort positions by pixel, which a new grid cannot keep.
fn is_distortion(key: &str) -> bool {
    let sip = |stem: &str| {
        key.strip_prefix(stem).is_some_and(|r| {
            r == "ORDER"
                || r == "DMAX"
                || r.split('_').all(|p| !p.is_empty() && p.bytes().all(|b| b.is_ascii_digit()))
        })
    };
    sip("A_") || sip("B_") || sip("AP_") || sip("BP_") || key.starts_with("CPDIS") || key.starts_with("D2IM")
}

/// Whether a card belongs to the linear part of some description, which is written anew.
fn is_linear(key: &str) -> bool {
    let stem = key.strip_suffix(|c: char| c.is_ascii_uppercase()).unwrap_or(key);
    let pair = |s: &str| matches!(s, "1_1" | "1_2" | "2_1" | "2_2");
    matches!(stem, "CRPIX1" | "CRPIX2" | "CDELT1" | "CDELT2" | "CROTA1" | "CROTA2")
        || stem.strip_prefix("CD").is_some_and(pair)
        || stem.strip_prefix("PC").is_some_and(pair)
        || key.starts_with("LTV")
        || key.starts_with("LTM")
}

/// The carried cards with every description corrected for the new grid. `old` are the cards as they were read.
///
/// # Errors
/// When a card holds no number.
pub fn corrected(old: &[String], grid: &Grid, path: &Path) -> Result<Vec<String>> {
    let cards = Cards { cards: old.to_vec(), end: 0 };
    let mut letters = vec![String::new()];
    letters.extend(('A'..='Z').map(|c| c.to_string()));
    let mut known = Vec::new();
    for letter in &letters {
        known.extend(Linear::read(&cards, letter, path)?);
    }
    // From new pixels to old ones, by way of the primary description; without a place nothing can be corrected.
    let mut before = Grid::new(1, 1);
    read(&cards, &mut before, &mut Vec::new(), path)?;
    let change = match (before.world, grid.world) {
        (Some(_), Some(_)) => Some(grid.to(&before)?),
        _ => None,
    };
    let mut fresh = Vec::new();
    for linear in &known {
        fresh.extend(linear_cards(linear, change.as_ref().unwrap_or(&Map::IDENTITY))?);
    }
    let mut out = Vec::new();
    let mut placed = false;
    for card in old {
        let key = keyword(card);
        if is_distortion(key) {
            continue;
        }
        if is_linear(key) {
            // All new ones stand where the first old one stood.
            if !placed {
                out.append(&mut fresh);
                placed = true;
            }
            continue;
        }
        // The type says that the distortions are there; they are not any more.
        out.push(if key.starts_with("CTYPE") { card.replacen("-SIP", "    ", 1) } else { card.clone() });
    }
    Ok(out)
}

/// The cards of one description on the new grid; `change` goes from new to old pixels (row, column), counted from 0.
fn linear_cards(linear: &Linear, change: &Map) -> Result<Vec<String>> {
    let onward = change.invert()?;
    let (row, column) = onward.apply(linear.reference[1] - 1.0, linear.reference[0] - 1.0);
    let j = change.jacobian(0.0, 0.0);
    // [x per column, x per row] of the old pixel, by the old pixel's steps per new one.
    let by = |m: [f64; 2]| [m[0] * j[1][1] + m[1] * j[0][1], m[0] * j[1][0] + m[1] * j[0][0]];
    let matrix = [by(linear.matrix[0]), by(linear.matrix[1])];
    let l = &linear.letter;
    let mut out = vec![real(&format!("CRPIX1{l}"), column + 1.0), real(&format!("CRPIX2{l}"), row + 1.0)];
    let diagonal = matrix[0][1] == 0.0 && matrix[1][0] == 0.0;
    for i in 0..2 {
        let scale = if diagonal { matrix[i][i] } else { matrix[i][0].hypot(matrix[i][1]) };
        if !linear.as_cd {
            out.push(real(&format!("CDELT{}{l}", i + 1), scale));
        }
        for j in 0..2 {
            let name = if linear.as_cd { "CD" } else { "PC" };
            let value = if linear.as_cd { matrix[i][j] } else { matrix[i][j] / scale };
            if linear.as_cd || !diagonal {
                out.push(real(&format!("{name}{}_{}{l}", i + 1, j + 1), value + 0.0));
            }
        }
    }
    Ok(out)
}

/// Cards for a grid that no FITS file gave.
pub fn of_grid(grid: &Grid) -> Vec<String> {
    let Some(w) = grid.world else { return Vec::new() };
    let mut out = Vec::new();
    for (i, row) in w.iter().enumerate() {
        let n = i + 1;
        out.push(super::cards::text(&format!("CTYPE{n}"), "LINEAR"));
        out.push(real(&format!("CRPIX{n}"), 1.0));
        out.push(real(&format!("CRVAL{n}"), row[2]));
        if let Some(unit) = &grid.unit {
            out.push(super::cards::text(&format!("CUNIT{n}"), unit));
        }
        out.push(real(&format!("CD{n}_1"), row[0]));
        out.push(real(&format!("CD{n}_2"), row[1]));
    }
    if let Some(crs) = &grid.crs {
        let crs: String = crs.chars().filter(|c| (' '..='~').contains(c)).take(60).collect();
        out.push(format!("{:<80}", format!("COMMENT world: {crs}")));
    }
    out
}
