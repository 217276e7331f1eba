//! The SIP convention (Shupe et al. 2005, ASP Conf. Ser. 347:491): polynomials in pixels from CRPIX that are added before
//! the matrix. A scaling along the axes only scales their coefficients; a turn would mix them.

use super::cards::{keyword, number_of, real, with_comment};
use super::wcs::Change;
use crate::error::Result;
use std::path::Path;

/// Which axis a coefficient moves (0 columns, 1 rows) and its powers of column and row.
struct Term {
    axis: usize,
    powers: (i32, i32),
    /// Whether it is a bound, which has no sign.
    unsigned: bool,
}

/// The polynomial's axis and what follows its name.
fn stem(key: &str) -> Option<(usize, &str)> {
    [("A_", 0), ("B_", 1), ("AP_", 0), ("BP_", 1)]
        .iter()
        .find_map(|(s, axis)| Some((*axis, key.strip_prefix(s)?)))
}

impl Term {
    fn of(key: &str) -> Option<Term> {
        let (axis, rest) = stem(key)?;
        // The greatest distortion, in pixels, scales like a constant term.
        if rest == "DMAX" {
            return Some(Term { axis, powers: (0, 0), unsigned: true });
        }
        let (p, q) = rest.split_once('_')?;
        let power = |t: &str| t.parse::<i32>().ok().filter(|v| (0..=9).contains(v) && t.len() == 1);
        Some(Term { axis, powers: (power(p)?, power(q)?), unsigned: false })
    }

    /// With column = `s.0` column', row = `s.1` row', the term of its axis is counted in new pixels of that axis.
    fn factor(&self, s: (f64, f64)) -> f64 {
        let own = if self.axis == 0 { s.0 } else { s.1 };
        let factor = s.0.powi(self.powers.0) * s.1.powi(self.powers.1) / own;
        if self.unsigned { factor.abs() } else { factor }
    }
}

/// Whether a card belongs to the convention.
pub fn is_sip(key: &str) -> bool {
    stem(key).is_some_and(|(_, rest)| rest == "ORDER") || Term::of(key).is_some()
}

/// Refuses coefficients that are no numbers.
///
/// # Errors
/// Names the card.
pub fn check(cards: &[String], path: &Path) -> Result<()> {
    cards.iter().filter(|c| Term::of(keyword(c)).is_some()).try_for_each(|c| number_of(c, path).map(|_| ()))
}

/// The cards with their coefficients for the new pixels; without them, and without the mark in CTYPE, where the grid is turned.
///
/// # Errors
/// When a coefficient is no number.
pub(super) fn corrected(cards: &[String], change: &Change, path: &Path) -> Result<Vec<String>> {
    let l = change.linear;
    let turned = l[0][1] != 0.0 || l[1][0] != 0.0;
    let mut out = Vec::with_capacity(cards.len());
    for card in cards {
        let key = keyword(card);
        if !is_sip(key) {
            let marked = turned && key.starts_with("CTYPE");
            out.push(if marked { card.replacen("-SIP", "    ", 1) } else { card.clone() });
            continue;
        }
        if turned {
            continue;
        }
        out.push(match Term::of(key) {
            Some(term) => {
                let value = number_of(card, path)?;
                let new = value * term.factor((l[0][0], l[1][1]));
                if new == value { card.clone() } else { with_comment(&real(key, new), card) }
            }
            None => card.clone(),
        });
    }
    Ok(out)
}
