//! What lies between intermediate and celestial coordinates, as one line of text (Calabretta and Greisen 2002, A&A 395:1077).
//!
//! The line is the grid's reference system. Two rasters with the same line share their intermediate coordinates, and the
//! line gives the cards back, so that a raster from elsewhere can be laid on such a grid.

use super::cards::{Cards, real, text};
use crate::error::Result;
use std::path::Path;

/// Algorithms of the celestial and spectral papers, and three in wide use.
const ALGORITHMS: &[&str] = &[
    "AZP", "SZP", "TAN", "STG", "SIN", "ARC", "ZPN", "ZEA", "AIR", "CYP", "CEA", "CAR", "MER", "SFL", "PAR",
    "MOL", "AIT", "COP", "COE", "COD", "COO", "BON", "PCO", "TSC", "CSC", "QSC", "HPX", "XPH", "NCP", "GLS",
    "TPV", "TNX", "ZPX", "LOG", "TAB", "F2W", "F2V", "F2A", "W2F", "W2V", "W2A", "V2F", "V2W", "V2A", "A2F",
    "A2W", "A2V", "GRI", "GRA",
];

/// Those about a pole at the reference point, whose usual LONPOLE is 180 degrees and which ask for no LATPOLE.
const ZENITHAL: &[&str] =
    &["AZP", "SZP", "TAN", "STG", "SIN", "ARC", "ZPN", "ZEA", "AIR", "TPV", "TNX", "ZPX"];

/// The algorithm that a coordinate type names: `TAN` of `RA---TAN`; `None` for linear types.
pub fn algorithm(ctype: &str) -> Option<&str> {
    let code = ctype.get(5..8).filter(|_| ctype.get(4..5) == Some("-"))?;
    ALGORITHMS.contains(&code).then_some(code)
}

/// The line for the axes `pair` (counted from 1) of the description with `letter`; `None` if both are linear.
///
/// # Errors
/// When a card holds no number.
pub fn line(cards: &Cards, letter: &str, pair: [usize; 2], path: &Path) -> Result<Option<String>> {
    let types = pair.map(|i| cards.text(&format!("CTYPE{i}{letter}")).unwrap_or_default());
    let Some(code) = types.iter().find_map(|t| algorithm(t)) else { return Ok(None) };
    let zenithal = ZENITHAL.contains(&code);
    let mut values = [0.0; 2];
    for (v, i) in values.iter_mut().zip(pair) {
        *v = cards.number(&format!("CRVAL{i}{letter}"), path)?.unwrap_or(0.0);
    }
    // Suffixes such as -SIP belong to the pixels.
    let short = |t: &str| match t.get(..8).unwrap_or(t).trim().replace(' ', "_") {
        t if t.is_empty() => "LINEAR".to_owned(),
        t => t,
    };
    let mut out = format!("{} {} at {}, {}", short(&types[0]), short(&types[1]), values[0], values[1]);
    let equatorial = types.iter().any(|t| ["RA", "DEC-", "ELON", "ELAT"].iter().any(|s| t.starts_with(s)));
    if equatorial {
        let equinox = match cards.number(&format!("EQUINOX{letter}"), path)? {
            None if letter.is_empty() => cards.number("EPOCH", path)?,
            v => v,
        };
        let named = cards
            .text(&format!("RADESYS{letter}"))
            .or_else(|| cards.text("RADECSYS"))
            .filter(|t| !t.is_empty());
        // The defaults of the standard, so that files which spell them out and files which do not can meet.
        let system = named.unwrap_or_else(|| {
            match equinox {
                None => "ICRS",
                Some(e) if e < 1984.0 => "FK4",
                Some(_) => "FK5",
            }
            .to_owned()
        });
        out += &format!(", RADESYS {system}");
        if system.starts_with("FK") {
            let usual = if system.starts_with("FK4") { 1950.0 } else { 2000.0 };
            out += &format!(", EQUINOX {}", equinox.unwrap_or(usual));
        }
    }
    if let Some(v) = cards.number(&format!("LONPOLE{letter}"), path)? {
        let usual = zenithal && v == 180.0 && values[1] < 90.0;
        if !usual {
            out += &format!(", LONPOLE {v}");
        }
    }
    if let (false, Some(v)) = (zenithal, cards.number(&format!("LATPOLE{letter}"), path)?) {
        out += &format!(", LATPOLE {v}");
    }
    for (n, i) in pair.into_iter().enumerate() {
        for m in 0..=99 {
            let key = format!("PV{i}_{m}{letter}");
            if let Some(v) = cards.number(&key, path)? {
                out += &format!(", PV{}_{m} {v}", n + 1);
            }
        }
    }
    // Plate polynomials written as texts are told apart by their sum alone.
    let plates: Vec<&String> =
        cards.cards.iter().filter(|c| c.starts_with("WAT1_") || c.starts_with("WAT2_")).collect();
    if ["TNX", "ZPX"].contains(&code) && !plates.is_empty() {
        let hash = plates
            .iter()
            .flat_map(|c| c.bytes())
            .fold(0xcbf2_9ce4_8422_2325u64, |h, b| (h ^ u64::from(b)).wrapping_mul(0x0000_0100_0000_01b3));
        out += &format!(", WAT {hash:016x}");
    }
    Ok(Some(out))
}

/// The cards that a line stands for, CTYPE and CRVAL first; `None` if it is no such line.
pub fn cards(line: &str) -> Option<Vec<String>> {
    let mut parts = line.split(", ");
    let (types, first) = parts.next()?.split_once(" at ")?;
    let (one, two) = types.split_once(' ')?;
    if algorithm(one).is_none() && algorithm(two).is_none() {
        return None;
    }
    let number = |t: &str| t.parse::<f64>().ok().filter(|v| v.is_finite());
    let values = [number(first)?, number(parts.next()?)?];
    let mut out = Vec::new();
    for (n, ctype) in [one, two].into_iter().enumerate() {
        out.push(text(&format!("CTYPE{}", n + 1), &ctype.replace('_', " ")));
        out.push(real(&format!("CRVAL{}", n + 1), *values.get(n)?));
    }
    for part in parts {
        let (key, value) = part.split_once(' ')?;
        let is_parameter = key.strip_prefix("PV").is_some_and(|r| {
            r.len() <= 4
                && r.split_once('_').is_some_and(|(i, m)| matches!(i, "1" | "2") && m.parse::<u8>().is_ok())
        });
        out.push(match key {
            "RADESYS" => text(key, value),
            "EQUINOX" | "LONPOLE" | "LATPOLE" => real(key, number(value)?),
            _ if is_parameter => real(key, number(value)?),
            _ => return None,
        });
    }
    Some(out)
}
