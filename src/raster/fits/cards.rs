//! FITS header cards: 80 characters each, in blocks of 36 (FITS standard 4.0; Pence et al. 2010, A&A 524:A42).

use crate::error::{Error, Result};
use crate::raster::Positioned;
use std::fs::File;
use std::path::Path;

/// Bytes of a block.
pub const BLOCK: u64 = 2880;

/// Headers longer than this are taken for damage.
const MAX_BLOCKS: u64 = 4096;

/// The cards of one header, as they stand, without END.
pub struct Cards {
    pub cards: Vec<String>,
    /// Where the data begin.
    pub end: u64,
}

impl Cards {
    /// Reads the header that begins at `at`; `None` at the end of the file.
    ///
    /// # Errors
    /// When the file ends within it or it holds something else than cards.
    pub fn read(file: &File, len: u64, at: u64, path: &Path) -> Result<Option<Self>> {
        if at >= len {
            return Ok(None);
        }
        let mut cards = Vec::new();
        for block in 0..MAX_BLOCKS {
            let start = at + block * BLOCK;
            if start + BLOCK > len {
                return Err(Error::malformed(
                    path,
                    format!("header at byte {at}"),
                    "the file ends before the card END",
                ));
            }
            let mut bytes = [0u8; BLOCK as usize];
            file.read_exact_at_offset(&mut bytes, start)
                .map_err(|e| Error::io(path, "reading the header", e))?;
            for (i, card) in bytes.chunks_exact(80).enumerate() {
                if !card.iter().all(|b| (32..127).contains(b)) {
                    return Err(Error::malformed(
                        path,
                        format!("card {} of the header at byte {at}", block * 36 + i as u64 + 1),
                        "it holds other characters than ASCII text",
                    ));
                }
                let card: String = card.iter().map(|b| char::from(*b)).collect();
                if card.trim_end() == "END" {
                    return Ok(Some(Cards { cards, end: start + BLOCK }));
                }
                cards.push(card);
            }
        }
        Err(Error::malformed(path, format!("header at byte {at}"), "no card END within 11 MB"))
    }

    fn find(&self, key: &str) -> Option<&str> {
        self.cards.iter().find(|c| keyword(c) == key).map(|c| value_of(c)).filter(|v| !v.is_empty())
    }

    /// A whole number; `None` if the card is not there.
    ///
    /// # Errors
    /// When the card holds no whole number.
    pub fn integer(&self, key: &str, path: &Path) -> Result<Option<i64>> {
        self.find(key)
            .map(|v| {
                v.parse().map_err(|_| Error::malformed(path, key, format!("\"{v}\" is no whole number")))
            })
            .transpose()
    }

    /// A number.
    ///
    /// # Errors
    /// When the card holds no number.
    pub fn number(&self, key: &str, path: &Path) -> Result<Option<f64>> {
        self.find(key)
            .map(|v| {
                // Double precision may be written with a D.
                let parsed = v.replace(['D', 'd'], "E").parse::<f64>().ok().filter(|v| v.is_finite());
                parsed.ok_or_else(|| Error::malformed(path, key, format!("\"{v}\" is no number")))
            })
            .transpose()
    }

    /// A text.
    pub fn text(&self, key: &str) -> Option<String> {
        let v = self.find(key)?.strip_prefix('\'')?;
        let mut out = String::new();
        let mut chars = v.chars().peekable();
        while let Some(c) = chars.next() {
            match c {
                '\'' if chars.peek() == Some(&'\'') => {
                    chars.next();
                    out.push('\'');
                }
                '\'' => break,
                c => out.push(c),
            }
        }
        Some(out.trim_end().to_owned())
    }

    /// Whether a logical card is true.
    pub fn is_true(&self, key: &str) -> bool {
        self.find(key) == Some("T")
    }
}

/// The keyword of a card.
pub fn keyword(card: &str) -> &str {
    card.get(..8).unwrap_or(card).trim_end()
}

/// What stands behind `= `, without comment; a text with its quotes.
fn value_of(card: &str) -> &str {
    if card.get(8..10) != Some("= ") {
        return "";
    }
    let rest = card.get(10..).unwrap_or("").trim();
    if let Some(text) = rest.strip_prefix('\'') {
        // A quote is doubled within a text.
        let (mut end, bytes) = (0, text.as_bytes());
        while end < bytes.len() {
            if bytes[end] == b'\'' {
                if bytes.get(end + 1) != Some(&b'\'') {
                    break;
                }
                end += 1;
            }
            end += 1;
        }
        return rest.get(..(end + 2).min(rest.len())).unwrap_or(rest);
    }
    rest.split('/').next().unwrap_or("").trim()
}

/// A card of a whole number or a logical, in fixed format.
pub fn fixed(key: &str, value: &str) -> String {
    format!("{:<80}", format!("{key:<8}= {value:>20}"))
}

/// A card of a number.
pub fn real(key: &str, value: f64) -> String {
    // The shortest text that reads back to the same bits.
    let plain = format!("{value:?}");
    let text = if plain.contains('e') || plain.len() > 20 { format!("{value:E}") } else { plain };
    fixed(key, &text)
}

/// A card of a text; cut where it would not fit.
pub fn text(key: &str, value: &str) -> String {
    let clean: String = value.chars().filter(|c| (' '..='~').contains(c)).collect();
    let quoted = clean.replace('\'', "''");
    let quoted = quoted.get(..67.min(quoted.len())).unwrap_or("").to_owned();
    format!("{:<80}", format!("{key:<8}= '{quoted:<8}'"))
}
