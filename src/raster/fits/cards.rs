//! FITS header cards: 80 characters each, in blocks of 36 (FITS standard 4.0; Pence et al. 2010, A&A 524:A42).

use crate::error::{Error, Result};
use crate::raster::Positioned;
use std::fs::File;
use std::path::Path;

/// Bytes of a block.
pub const BLOCK: u64 = 2880;

/// Characters of a card.
pub const CARD: usize = 80;

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
        let place = || format!("header at byte {at}");
        let mut cards = Vec::new();
        for block in 0..MAX_BLOCKS {
            let start = at + block * BLOCK;
            if start + BLOCK > len {
                return Err(Error::malformed(path, place(), "the file ends before the card END"));
            }
            let mut bytes = [0u8; BLOCK as usize];
            file.read_exact_at_offset(&mut bytes, start)
                .map_err(|e| Error::io(path, "reading the header", e))?;
            for (i, card) in bytes.chunks_exact(CARD).enumerate() {
                if !card.iter().all(|b| (32..127).contains(b)) {
                    let shown: String = card[..8].iter().map(|b| char::from(*b)).collect();
                    return Err(Error::malformed(
                        path,
                        format!("card {} of the header at byte {at}", block * 36 + i as u64 + 1),
                        format!(
                            "it holds other characters than ASCII text (it begins \"{}\"), or the card END is missing before it",
                            shown.escape_debug()
                        ),
                    ));
                }
                let card: String = card.iter().map(|b| char::from(*b)).collect();
                if card.trim_end() == "END" {
                    return Ok(Some(Cards { cards, end: start + BLOCK }));
                }
                cards.push(card);
            }
        }
        Err(Error::malformed(path, place(), "no card END within 11 MB"))
    }

    /// The first card of a keyword that has a value.
    fn find(&self, key: &str) -> Option<&str> {
        self.cards.iter().find(|c| keyword(c) == key).map(String::as_str).filter(|c| !value_of(c).is_empty())
    }

    /// A whole number; `None` if the card is not there.
    ///
    /// # Errors
    /// When the card holds no whole number.
    pub fn integer(&self, key: &str, path: &Path) -> Result<Option<i64>> {
        let Some(v) = self.find(key).map(value_of) else { return Ok(None) };
        v.parse()
            .map(Some)
            .map_err(|_| Error::malformed(path, format!("card {key}"), format!("{v} is no whole number")))
    }

    /// A number; `None` if the card is not there.
    ///
    /// # Errors
    /// When the card holds no number.
    pub fn number(&self, key: &str, path: &Path) -> Result<Option<f64>> {
        self.find(key).map(|c| number_of(c, path)).transpose()
    }

    /// A text.
    pub fn text(&self, key: &str) -> Option<String> {
        self.find(key).and_then(text_of)
    }

    /// Whether a logical card is true.
    pub fn is_true(&self, key: &str) -> bool {
        self.find(key).map(value_of) == Some("T")
    }

    /// Whether a logical card is there and false.
    pub fn is_false(&self, key: &str) -> bool {
        self.find(key).map(value_of) == Some("F")
    }
}

/// The keyword of a card.
pub fn keyword(card: &str) -> &str {
    card.get(..8).unwrap_or(card).trim_end()
}

/// What stands behind `= `, without comment; a text with its quotes. Empty where there is no value.
pub fn value_of(card: &str) -> &str {
    split(card).0
}

/// The number of a card.
///
/// # Errors
/// When it holds none.
pub fn number_of(card: &str, path: &Path) -> Result<f64> {
    let v = value_of(card);
    // Double precision may be written with a D; words for what is no number are no FITS.
    let fine = v.bytes().all(|b| b.is_ascii_digit() || b"+-.EeDd".contains(&b));
    let parsed =
        fine.then(|| v.replace(['D', 'd'], "E").parse::<f64>().ok()).flatten().filter(|v| v.is_finite());
    parsed
        .ok_or_else(|| Error::malformed(path, format!("card {}", keyword(card)), format!("{v} is no number")))
}

/// The text of a card.
pub fn text_of(card: &str) -> Option<String> {
    let v = value_of(card).strip_prefix('\'')?;
    let v = v.strip_suffix('\'').unwrap_or(v);
    Some(v.replace("''", "'").trim_end().to_owned())
}

/// Value and comment of a card (the comment with its slash).
fn split(card: &str) -> (&str, &str) {
    if card.get(8..10) != Some("= ") {
        return ("", "");
    }
    let rest = card.get(10..).unwrap_or("").trim();
    let end = if let Some(text) = rest.strip_prefix('\'') {
        // A quote is doubled within a text.
        let (mut end, bytes) = (0, text.as_bytes());
        while let Some(b) = bytes.get(end) {
            if *b == b'\'' {
                if bytes.get(end + 1) != Some(&b'\'') {
                    break;
                }
                end += 1;
            }
            end += 1;
        }
        (end + 2).min(rest.len())
    } else {
        rest.find('/').unwrap_or(rest.len())
    };
    match rest.split_at_checked(end) {
        Some((value, comment)) => (value.trim(), comment.trim()),
        None => (rest, ""),
    }
}

/// A card of a whole number or a logical, in fixed format.
pub fn fixed(key: &str, value: &str) -> String {
    padded(&format!("{key:<8}= {value:>20}"))
}

/// A card of a number.
pub fn real(key: &str, value: f64) -> String {
    // The shortest text that reads back to the same bits; no -0.
    let value = value + 0.0;
    let plain = format!("{value:?}");
    fixed(key, &if plain.contains('e') || plain.len() > 20 { format!("{value:E}") } else { plain })
}

/// A card of a text; other characters than ASCII become `?`, and what would not fit is cut.
pub fn text(key: &str, value: &str) -> String {
    let mut quoted = String::new();
    for c in value.chars() {
        let next = match c {
            '\'' => "''".to_owned(),
            ' '..='~' => c.to_string(),
            _ => "?".to_owned(),
        };
        if quoted.len() + next.len() > CARD - 12 {
            break;
        }
        quoted += &next;
    }
    padded(&format!("{key:<8}= {:<20}", format!("'{quoted:<8}'")))
}

/// The card `new` with the comment of `old`, as far as there is room.
pub fn with_comment(new: &str, old: &str) -> String {
    match split(old).1 {
        "" => new.to_owned(),
        comment => padded(&format!("{:<30} {comment}", new.trim_end())),
    }
}

/// 80 characters of ASCII text, whatever was given.
pub fn padded(card: &str) -> String {
    let clean: String =
        card.chars().take(CARD).map(|c| if (' '..='~').contains(&c) { c } else { '?' }).collect();
    format!("{clean:<80}")
}
