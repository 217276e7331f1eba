//! World coordinates of FITS (Greisen and Calabretta 2002, A&A 395:1061): read into the grid, and corrected for a new one.
//!
//! Intermediate world coordinates are linear: CD (p - CRPIX), p counted from 1, columns first. Where a type names a
//! projection the grid's world is these, and its reference system is the [`projection`]'s line; two such rasters meet only
//! if both agree. On writing only CRPIX and the matrix change: whatever is not linear stays right.

use super::cards::{Cards, keyword, number_of, real, with_comment};
use super::fresh::of_grid;
use super::{projection, sip};
use crate::error::Result;
use crate::grid::{Grid, World};
use crate::map::Map;
use std::collections::BTreeMap;
use std::path::Path;

/// A number of a description, by its axes (counted from 1).
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
enum Part {
    Reference(usize),
    Delta(usize),
    Turn(usize),
    Cd(usize, usize),
    Pc(usize, usize),
}

impl Part {
    fn key(self, letter: &str) -> String {
        match self {
            Part::Reference(j) => format!("CRPIX{j}{letter}"),
            Part::Delta(i) => format!("CDELT{i}{letter}"),
            Part::Turn(i) => format!("CROTA{i}{letter}"),
            Part::Cd(i, j) => format!("CD{i}_{j}{letter}"),
            Part::Pc(i, j) => format!("PC{i}_{j}{letter}"),
        }
    }

    /// The part and letter of a keyword.
    fn of(key: &str) -> Option<(Part, &str)> {
        for (stem, make) in [
            ("CRPIX", Part::Reference as fn(usize) -> Part),
            ("CDELT", Part::Delta as fn(usize) -> Part),
            ("CROTA", Part::Turn as fn(usize) -> Part),
        ] {
            if let Some(rest) = key.strip_prefix(stem) {
                let (i, letter) = axis(rest)?;
                return is_letter(letter).then(|| (make(i), letter));
            }
        }
        let make = match key.get(..2)? {
            "CD" => Part::Cd as fn(usize, usize) -> Part,
            "PC" => Part::Pc as fn(usize, usize) -> Part,
            _ => return None,
        };
        let (i, rest) = axis(key.get(2..)?)?;
        let (j, letter) = axis(rest.strip_prefix('_')?)?;
        is_letter(letter).then(|| (make(i, j), letter))
    }
}

/// The number of an axis, 1 to 99, and what follows it.
fn axis(text: &str) -> Option<(usize, &str)> {
    let end = text.find(|c: char| !c.is_ascii_digit()).unwrap_or(text.len());
    let (digits, rest) = text.split_at_checked(end)?;
    let fine = (1..=2).contains(&digits.len()) && !digits.starts_with('0');
    fine.then(|| Some((digits.parse().ok()?, rest)))?
}

/// Whether a text is the letter of a description: nothing, or A to Z.
fn is_letter(text: &str) -> bool {
    text.len() <= 1 && text.bytes().all(|b| b.is_ascii_uppercase())
}

/// Whether a keyword belongs to some description of world coordinates.
pub fn is_world(key: &str) -> bool {
    if Part::of(key).is_some() || sip::is_sip(key) || is_table(key) {
        return true;
    }
    let stem = |s: &str| key.strip_prefix(s);
    let by_axis = ["CRVAL", "CTYPE", "CUNIT", "CNAME", "CRDER", "CSYER"]
        .iter()
        .any(|s| stem(s).and_then(axis).is_some_and(|(_, letter)| is_letter(letter)));
    let parameter = ["PV", "PS"].iter().any(|s| {
        stem(s).and_then(axis).and_then(|(_, r)| r.strip_prefix('_')).is_some_and(|r| {
            r.trim_end_matches(|c: char| c.is_ascii_uppercase()).bytes().all(|b| b.is_ascii_digit())
        })
    });
    let whole = ["WCSAXES", "WCSNAME", "LONPOLE", "LATPOLE", "RADESYS", "EQUINOX"]
        .iter()
        .any(|s| stem(s).is_some_and(is_letter));
    by_axis || parameter || whole || matches!(key, "RADECSYS" | "EPOCH" | "WCSDIM") || key.starts_with("WAT")
}

/// Distortions by lookup tables that stand in other HDUs, or act on pixels in ways that no card of a new grid can say.
pub fn is_table(key: &str) -> bool {
    let numbered = ["CPDIS", "CQDIS", "CPERR", "CQERR", "DP", "DQ"]
        .iter()
        .any(|s| key.strip_prefix(s).and_then(axis).is_some_and(|(_, letter)| is_letter(letter)));
    numbered || key.starts_with("D2IM") || matches!(key, "AXISCORR" | "DVERR")
}

/// How a description writes its matrix.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Form {
    /// CDi_j.
    Cd,
    /// CDELTi, with PCi_j where they differ from one.
    Pc,
    /// CDELTi and the older CROTAi, held as PCi_j.
    Turn,
}

/// One description: what of it depends on pixels.
struct Wcs {
    /// Nothing, or A to Z.
    letter: String,
    form: Form,
    /// As the cards have them.
    given: BTreeMap<Part, f64>,
    /// CDi_j or PCi_j, those of CROTAi included.
    matrix: BTreeMap<(usize, usize), f64>,
    axes: usize,
}

impl Wcs {
    /// All descriptions: the one without letter first, then A to Z.
    fn all(cards: &[String], path: &Path) -> Result<Vec<Wcs>> {
        let mut found: BTreeMap<String, BTreeMap<Part, f64>> = BTreeMap::new();
        for card in cards {
            if let Some((part, letter)) = Part::of(keyword(card)) {
                let value = number_of(card, path)?;
                found.entry(letter.to_owned()).or_default().entry(part).or_insert(value);
            }
        }
        // One that speaks of other axes alone does not depend on rows and columns.
        let of_pixels = |p: &Part| match *p {
            Part::Reference(i) | Part::Delta(i) | Part::Turn(i) => i <= 2,
            Part::Cd(_, j) | Part::Pc(_, j) => j <= 2,
        };
        let whole = Cards { cards: cards.to_vec(), end: 0 };
        Ok(found
            .into_iter()
            .filter(|(_, given)| given.keys().any(of_pixels))
            .map(|(letter, given)| Wcs::new(letter, given, &whole))
            .collect())
    }

    fn new(letter: String, given: BTreeMap<Part, f64>, cards: &Cards) -> Self {
        let entries = |pick: &dyn Fn(&Part) -> Option<(usize, usize)>| -> BTreeMap<(usize, usize), f64> {
            given.iter().filter_map(|(p, v)| Some((pick(p)?, *v))).collect()
        };
        let cd = entries(&|p| if let Part::Cd(i, j) = p { Some((*i, *j)) } else { None });
        let pc = entries(&|p| if let Part::Pc(i, j) = p { Some((*i, *j)) } else { None });
        let (form, matrix) = match (pc.is_empty(), cd.is_empty()) {
            (true, false) => (Form::Cd, cd),
            (false, _) => (Form::Pc, pc),
            (true, true) => match turned(&given, &letter, cards) {
                Some(pc) => (Form::Turn, pc),
                None => (Form::Pc, pc),
            },
        };
        let axes = given
            .keys()
            .map(|p| match *p {
                Part::Reference(i) | Part::Delta(i) | Part::Turn(i) => i,
                Part::Cd(i, j) | Part::Pc(i, j) => i.max(j),
            })
            .max()
            .map_or(2, |n| n.max(2));
        Wcs { letter, form, given, matrix, axes }
    }

    fn reference(&self, j: usize) -> f64 {
        self.given.get(&Part::Reference(j)).copied().unwrap_or(0.0)
    }

    fn delta(&self, i: usize) -> f64 {
        self.given.get(&Part::Delta(i)).copied().unwrap_or(1.0)
    }

    /// An entry of the matrix as it is written: CDi_j or PCi_j.
    fn entry(&self, i: usize, j: usize) -> f64 {
        let usual = if self.form != Form::Cd && i == j { 1.0 } else { 0.0 };
        self.matrix.get(&(i, j)).copied().unwrap_or(usual)
    }

    /// Intermediate coordinates of two axes from (column, row, 1), counted from 0.
    fn world(&self, pair: [usize; 2]) -> World {
        pair.map(|i| {
            let scale = if self.form == Form::Cd { 1.0 } else { self.delta(i) };
            let (a, b) = (scale * self.entry(i, 1), scale * self.entry(i, 2));
            [a, b, a * (1.0 - self.reference(1)) + b * (1.0 - self.reference(2))]
        })
    }

    /// What changes for a new grid. A value for every card of the linear part that shall stand; others go.
    fn corrected(&self, change: &Change) -> BTreeMap<Part, f64> {
        let l = change.linear;
        let mut out = self.given.clone();
        let det = l[0][0] * l[1][1] - l[0][1] * l[1][0];
        let from = [self.reference(1) - change.offset[0], self.reference(2) - change.offset[1]];
        out.insert(Part::Reference(1), (l[1][1] * from[0] - l[0][1] * from[1]) / det);
        out.insert(Part::Reference(2), (l[0][0] * from[1] - l[1][0] * from[0]) / det);
        if l == [[1.0, 0.0], [0.0, 1.0]] {
            return out;
        }
        out.retain(|p, _| {
            !(matches!(p, Part::Turn(_)) || self.form == Form::Cd && matches!(p, Part::Delta(_)))
        });
        // A scaling can stand in CDELT alone where the axes of the image are on their own and PC commutes with it.
        let apart = |i: usize, j: usize| self.entry(i, j) == 0.0;
        let alone = (3..=self.axes).all(|k| apart(1, k) && apart(2, k) && apart(k, 1) && apart(k, 2));
        let diagonal = l[0][1] == 0.0 && l[1][0] == 0.0;
        let commutes = diagonal && (l[0][0] == l[1][1] || (apart(1, 2) && apart(2, 1)));
        if self.form != Form::Cd && alone && commutes {
            for i in 1..=2 {
                out.insert(Part::Delta(i), self.delta(i) * l[i - 1][i - 1]);
            }
            let turns = self.given.iter().filter(|(p, _)| matches!(p, Part::Turn(_)));
            out.extend(turns.map(|(p, v)| (*p, *v)));
            return out;
        }
        for i in 1..=self.axes {
            let row = [self.entry(i, 1), self.entry(i, 2)];
            for j in 1..=2 {
                let value = row[0] * l[0][j - 1] + row[1] * l[1][j - 1];
                let part = if self.form == Form::Cd { Part::Cd(i, j) } else { Part::Pc(i, j) };
                let usual = if self.form != Form::Cd && i == j { 1.0 } else { 0.0 };
                if value != usual || self.given.contains_key(&part) || (self.form == Form::Cd && i == j) {
                    out.insert(part, value + 0.0);
                }
            }
        }
        out
    }
}

/// PCi_j for the older CROTAi of the latitude axis (the second axis where neither is one); formula (189) of the paper.
fn turned(given: &BTreeMap<Part, f64>, letter: &str, cards: &Cards) -> Option<BTreeMap<(usize, usize), f64>> {
    let latitude = (1..=2).find(|i| {
        let t = cards.text(&format!("CTYPE{i}{letter}")).unwrap_or_default();
        t.starts_with("DEC") || t.get(1..4) == Some("LAT") || t.get(2..4) == Some("LT")
    });
    let j = latitude.unwrap_or(2);
    let i = 3 - j;
    let turn = given.get(&Part::Turn(j)).copied().filter(|t| *t != 0.0)?;
    let delta = |i| given.get(&Part::Delta(i)).copied().unwrap_or(1.0);
    let (sin, cos) = turn.to_radians().sin_cos();
    let ratio = delta(j) / delta(i);
    Some([((i, i), cos), ((i, j), -sin * ratio), ((j, i), sin / ratio), ((j, j), cos)].into())
}

/// Where the raster lies, by its first description that can tell.
struct Place {
    world: World,
    crs: Option<String>,
    unit: Option<String>,
}

/// The place that the cards give; `Err` with the reason where there are descriptions of no use.
fn place(
    cards: &Cards,
    known: &[Wcs],
    path: &Path,
) -> Result<Option<std::result::Result<Place, &'static str>>> {
    let mut reason = None;
    for wcs in known {
        let l = &wcs.letter;
        let pairs = (1..=wcs.axes).flat_map(|a| (a + 1..=wcs.axes).map(move |b| [a, b]));
        let Some((pair, mut world)) = pairs.map(|p| (p, wcs.world(p))).find(|(_, w)| has_inverse(w)) else {
            reason.get_or_insert("the matrix of the world coordinates has no inverse");
            continue;
        };
        let ctype = |i: usize| cards.text(&format!("CTYPE{i}{l}")).unwrap_or_default();
        if pair.iter().any(|i| projection::algorithm(&ctype(*i)) == Some("TAB")) {
            reason.get_or_insert("the world coordinates stand in a table of another HDU");
            continue;
        }
        let mut crs = projection::line(cards, l, pair, path)?;
        if crs.is_none() {
            for (row, i) in world.iter_mut().zip(pair) {
                row[2] += cards.number(&format!("CRVAL{i}{l}"), path)?.unwrap_or(0.0);
            }
            crs = cards.text(&format!("WCSNAME{l}")).filter(|n| !n.is_empty());
        }
        let unit = cards.text(&format!("CUNIT{}{l}", pair[0])).filter(|u| !u.is_empty());
        let unit = unit.map(|u| if u == "um" { "µm".into() } else { u });
        return Ok(Some(Ok(Place { world, crs, unit })));
    }
    Ok(reason.map(Err))
}

fn has_inverse(w: &World) -> bool {
    Map::affine([[w[1][1], w[1][0], w[1][2]], [w[0][1], w[0][0], w[0][2]]]).invert().is_ok()
}

/// Sets the grid's place from the carried cards; takes cards out that no other file can keep.
///
/// # Errors
/// When a card holds no number.
pub fn read(cards: &mut Vec<String>, grid: &mut Grid, notes: &mut Vec<String>, path: &Path) -> Result<()> {
    let before = cards.len();
    cards.retain(|c| !is_table(keyword(c)));
    if cards.len() < before {
        notes.push("distortions by lookup tables of other HDUs are not carried over, nor looked at".into());
    }
    if cards.iter().any(|c| sip::is_sip(keyword(c))) {
        notes.push(
            "its SIP distortion is kept where pixels are scaled or shifted; where rasters are brought together by their \
             world it is not looked at, and dropped if the grid is turned"
                .into(),
        );
        sip::check(cards, path)?;
    }
    let known = Wcs::all(cards, path)?;
    let whole = Cards { cards: std::mem::take(cards), end: 0 };
    let found = place(&whole, &known, path)?;
    *cards = whole.cards;
    match found {
        Some(Ok(place)) => {
            (grid.world, grid.crs, grid.unit) = (Some(place.world), place.crs, place.unit);
        }
        Some(Err(reason)) => {
            notes.push(format!("{reason}: they are not carried over"));
            cards.retain(|c| !is_world(keyword(c)));
        }
        None => {}
    }
    Ok(())
}

/// From new pixels to old ones, (column, row) counted from 1: `linear` p + `offset`.
pub(super) struct Change {
    pub linear: [[f64; 2]; 2],
    pub offset: [f64; 2],
}

impl Change {
    /// By way of the world. What division leaves behind is cleared below 1e-10 pixels over the grid.
    fn between(new: &World, old: &World, size: (usize, usize)) -> Change {
        let det = old[0][0] * old[1][1] - old[0][1] * old[1][0];
        let back =
            |x: f64, y: f64| [(old[1][1] * x - old[0][1] * y) / det, (old[0][0] * y - old[1][0] * x) / det];
        let tidy = |v: f64, extent: f64| {
            let whole = v.round();
            if (v - whole).abs() * extent < 1e-10 { whole + 0.0 } else { v }
        };
        let extent = size.0.max(size.1).max(1) as f64;
        let (a, b) = (back(new[0][0], new[1][0]), back(new[0][1], new[1][1]));
        let linear = [[a[0], b[0]], [a[1], b[1]]].map(|row| row.map(|v| tidy(v, extent)));
        let at = back(new[0][2] - old[0][2], new[1][2] - old[1][2]);
        // The first pixel is 1, not 0.
        let offset = [0, 1].map(|i| tidy(at[i], 1.0) + 1.0 - linear[i][0] - linear[i][1]);
        Change { linear, offset }
    }
}

/// The carried cards with every description corrected for the grid they are written for.
///
/// # Errors
/// When a card holds no number.
pub fn corrected(cards: &[String], grid: &Grid, path: &Path) -> Result<Vec<String>> {
    let known = Wcs::all(cards, path)?;
    let whole = Cards { cards: cards.to_vec(), end: 0 };
    let before = place(&whole, &known, path)?.and_then(std::result::Result::ok);
    let same = before.as_ref().filter(|b| b.crs == grid.crs);
    let (Some(before), Some(new)) = (same, grid.world) else {
        // Laid by a map on a grid of another place or of none: what the cards say of places is about another raster.
        let mut out = cards.to_vec();
        if !known.is_empty() || grid.world.is_some() {
            out.retain(|c| !is_world(keyword(c)));
        }
        out.extend(of_grid(grid));
        return Ok(out);
    };
    let change = Change::between(&new, &before.world, (grid.rows, grid.columns));
    let mut fresh: BTreeMap<String, f64> = BTreeMap::new();
    for wcs in &known {
        let parts = wcs.corrected(&change);
        fresh.extend(parts.into_iter().map(|(p, v)| (p.key(&wcs.letter), v)));
    }
    let letters: Vec<&str> = known.iter().map(|w| w.letter.as_str()).collect();
    let mut out = Vec::new();
    for card in sip::corrected(cards, &change, path)? {
        let key = keyword(&card);
        if !Part::of(key).is_some_and(|(_, l)| letters.contains(&l)) {
            out.push(card);
            continue;
        }
        // In its place and with its comment; as it was, letter by letter, where nothing changed.
        if let Some(value) = fresh.remove(key) {
            let kept = number_of(&card, path).is_ok_and(|v| v == value);
            out.push(if kept { card } else { with_comment(&real(key, value), &card) });
        }
    }
    out.extend(fresh.into_iter().map(|(key, value)| real(&key, value)));
    Ok(out)
}
