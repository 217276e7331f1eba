//! The page of a difference of two rasters.

use super::figure::number;
use super::{Paint, Range, Tile, page, picture, section, table, tiles, words};
use crate::error::Result;
use crate::report::palette::Palette;
use serde_json::Value;

/// The page: `values` is the difference reduced for the page, `columns` a row; `account` is its ledger.
///
/// # Errors
/// When the picture cannot be made.
pub fn difference_page(
    summary: &[String],
    account: &Value,
    (values, columns, repeat): (&[f64], usize, usize),
    command: &[String],
) -> Result<String> {
    let get = |key: &str| account["difference"][key].as_f64();
    let mut all = Vec::new();
    for (key, name, note) in [
        ("mean", "Mean", "of the difference"),
        ("std", "Standard deviation", "of the difference"),
        ("predicted", "Explained by uncertainty", "root mean square of the stated ones"),
    ] {
        if let Some(v) = get(key) {
            all.push(Tile::new(name, number(v), note));
        }
    }
    if let Some(v) = get("beyond_3_sigma") {
        all.push(Tile::new("Beyond three sigma", format!("{:.2} %", 100.0 * v), "0.27 % would be by chance"));
    }
    let paint = Paint::Scale(Palette::Diverging, Range::about_zero(values));
    let alt = ("", "The difference, rust where negative, blue where positive");
    let figure = format!(
        "<figure>{}{}<figcaption>Rust where A is lower than B, blue where it is higher; hatched grey where one is missing.\
         </figcaption></figure>",
        picture(values, columns, repeat, &paint, alt)?,
        paint.key("")
    );
    let body = tiles(&all)
        + &section("In words", &words(summary))
        + &section("The difference", &figure)
        + &section("All numbers", &table(account, |_| None));
    Ok(page("A difference of two rasters", "Each resampled once onto one grid", &body, command))
}
