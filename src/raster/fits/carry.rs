//! Which cards travel to another file, and which would be wrong there.

use super::cards::{Cards, keyword, text_of, value_of};
use super::wcs;

/// What becomes of the cards of a file that is read.
pub struct Carried {
    /// Cards that travel, in order.
    pub cards: Vec<String>,
    /// Names of those that would be wrong on another grid.
    pub dropped: Vec<String>,
}

/// Sorts the cards of an image; `primary` are those of a primary HDU without data, which speak for its extensions.
pub fn carried(image: &Cards, primary: Option<&Cards>) -> Carried {
    let mut out = Carried { cards: Vec::new(), dropped: Vec::new() };
    if let Some(primary) = primary {
        let said = |key: &str| image.cards.iter().any(|c| keyword(c) == key);
        out.sort(&primary.cards, &|card| {
            let key = keyword(card);
            // Comments say nothing twice; the boilerplate of the format itself is no news.
            let more = matches!(key, "COMMENT" | "HISTORY" | "HIERARCH" | "") || !said(key);
            more && !wcs::is_world(key) && !card.contains("FITS (Flexible Image Transport System)")
        });
    }
    out.sort(&image.cards, &|_| true);
    while out.cards.last().is_some_and(|c| c.trim().is_empty()) {
        out.cards.pop();
    }
    out.dropped.sort();
    out.dropped.dedup();
    out
}

impl Carried {
    fn sort(&mut self, cards: &[String], wanted: &dyn Fn(&str) -> bool) {
        // A text of several cards shares the fate of its first.
        let mut keeps = false;
        for card in cards {
            let key = keyword(card);
            if key != "CONTINUE" {
                let stale = is_of_pixels(key) || is_of_samples(key);
                keeps = !stale && !is_structural(key) && wanted(card);
                if stale {
                    self.dropped.push(key.to_owned());
                }
            }
            if keeps {
                self.cards.push(card.clone());
            }
        }
    }
}

/// Cards that say how the data stand in their own file.
pub fn is_structural(key: &str) -> bool {
    key.strip_prefix("NAXIS").is_some_and(|n| n.bytes().all(|b| b.is_ascii_digit()))
        || matches!(
            key,
            "SIMPLE"
                | "XTENSION"
                | "BITPIX"
                | "EXTEND"
                | "NEXTEND"
                | "PCOUNT"
                | "GCOUNT"
                | "GROUPS"
                | "BLOCKED"
                | "BSCALE"
                | "BZERO"
                | "BLANK"
                | "CHECKSUM"
                | "DATASUM"
                | "INHERIT"
                | "END"
        )
}

/// Cards about samples as they were.
fn is_of_samples(key: &str) -> bool {
    matches!(key, "DATAMIN" | "DATAMAX")
}

/// Cards that count pixels of their own grid, or say how large they are, beside the standard's world coordinates: places on
/// the detector and on the plate, sections, pixel scales (common practice, no source).
fn is_of_pixels(key: &str) -> bool {
    let numbered = |stems: &[&str]| {
        stems.iter().any(|s| {
            key.strip_prefix(s)
                .is_some_and(|r| !r.is_empty() && r.bytes().all(|b| b.is_ascii_digit() || b == b'_'))
        })
    };
    numbered(&["LTV", "LTM", "ATV", "ATM", "DTV", "DTM", "CNPIX", "AMDX", "AMDY", "PIXSCAL", "SECPIX"])
        || matches!(
            key,
            "DATASEC"
                | "CCDSEC"
                | "BIASSEC"
                | "TRIMSEC"
                | "DETSEC"
                | "AMPSEC"
                | "ORIGSEC"
                | "PIXSCALE"
                | "SECPIX"
                | "XPIXSZ"
                | "YPIXSZ"
                | "XPIXELSZ"
                | "YPIXELSZ"
        )
}

/// Names of planes as this program writes them, where every plane has one; taken out of the cards.
pub fn take_band_names(cards: &mut Vec<String>, bands: usize) -> Vec<String> {
    let place = |cards: &[String], n: usize| {
        let key = format!("BAND{}", n + 1);
        cards.iter().position(|c| keyword(c) == key && text_of(c).is_some())
    };
    let found: Option<Vec<usize>> =
        if bands > MAX_NAMES { None } else { (0..bands).map(|n| place(cards, n)).collect() };
    let Some(mut found) = found else { return Vec::new() };
    let names = found.iter().map(|i| cards.get(*i).and_then(|c| text_of(c)).unwrap_or_default()).collect();
    found.sort_unstable();
    for i in found.into_iter().rev() {
        cards.remove(i);
    }
    names
}

/// The most planes that get names: FITS has eight characters for a keyword.
pub const MAX_NAMES: usize = 999;

/// Says that a sample stands for a point; FITS itself has no word for it.
pub const PIXEL_IS: &str = "PIXELIS";

/// Whether the cards say that samples stand for points; the card is taken out.
pub fn take_pixel_is_point(cards: &mut Vec<String>) -> bool {
    let before = cards.len();
    cards.retain(|c| !(keyword(c) == PIXEL_IS && value_of(c).trim_matches(['\'', ' ']) == "POINT"));
    cards.len() < before
}
