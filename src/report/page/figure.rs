//! Pictures on a page: rasters painted by palette, embedded as PNG, and the figure that flicks between two.

use super::escape;
use crate::error::Result;
use crate::report::Picture;
use crate::report::colour::{Oklab, Rgb};
use crate::report::palette::{MISSING_GROUND, MISSING_HATCH, Palette, class_colour};
use base64::Engine;

/// What the ends of a palette stand for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Range {
    /// Painted with the palette's first colour.
    pub low: f64,
    /// Painted with its last.
    pub high: f64,
}

impl Range {
    /// From the 1st to the 99.5th percentile of all values, so that a few stars or faults do not hide the rest.
    pub fn of(all: &[&[f64]]) -> Self {
        let mut v: Vec<f64> = all.iter().flat_map(|v| v.iter().copied()).filter(|v| v.is_finite()).collect();
        v.sort_by(f64::total_cmp);
        let at =
            |p: f64| v.get(((v.len().saturating_sub(1)) as f64 * p).round() as usize).copied().unwrap_or(0.0);
        let (low, high) = (at(0.01), at(0.995));
        if high > low { Range { low, high } } else { Range { low: low - 0.5, high: low + 0.5 } }
    }

    /// Even about 0, to the 99th percentile of the moduli.
    pub fn about_zero(values: &[f64]) -> Self {
        let mut v: Vec<f64> = values.iter().map(|v| v.abs()).filter(|v| v.is_finite()).collect();
        v.sort_by(f64::total_cmp);
        let most = v.get((v.len().saturating_sub(1)) * 99 / 100).copied().unwrap_or(0.0);
        let most = if most > 0.0 { most } else { 1.0 };
        Range { low: -most, high: most }
    }

    fn place(&self, v: f64) -> f64 {
        (v - self.low) / (self.high - self.low)
    }
}

/// How values become colours.
#[derive(Clone, Debug, PartialEq)]
pub enum Paint {
    /// By size.
    Scale(Palette, Range),
    /// Class codes: these, in ascending order.
    Classes(Vec<f64>),
}

/// Classes that a key names.
const NAMED_CLASSES: usize = 24;

impl Paint {
    /// For class codes of some rasters.
    pub fn classes(all: &[&[f64]]) -> Self {
        let mut codes: Vec<f64> = Vec::new();
        for v in all.iter().flat_map(|v| v.iter()).filter(|v| v.is_finite()) {
            if let Err(at) = codes.binary_search_by(|c| c.total_cmp(v)) {
                codes.insert(at, *v);
            }
        }
        Paint::Classes(codes)
    }

    fn colour(&self, v: f64) -> Rgb {
        match self {
            Paint::Scale(palette, range) => palette.at(range.place(v)),
            Paint::Classes(codes) => class_colour(codes.partition_point(|c| *c < v)),
        }
        .to_rgb()
    }

    /// What the colours stand for.
    pub fn key(&self, unit: &str) -> String {
        let Paint::Classes(codes) = self else { return self.bar(unit) };
        let named: String = codes
            .iter()
            .take(NAMED_CLASSES)
            .map(|c| {
                let [r, g, b] = self.colour(*c);
                format!("<span><i style=\"background:#{r:02x}{g:02x}{b:02x}\"></i>{}</span>", number(*c))
            })
            .collect();
        let more = codes.len().saturating_sub(NAMED_CLASSES);
        let rest = if more > 0 { format!("<span>and {more} more</span>") } else { String::new() };
        format!("<div class=\"classes\">{named}{rest}</div>\n")
    }

    /// A colour bar with its ends.
    fn bar(&self, unit: &str) -> String {
        let Paint::Scale(palette, range) = self else { return String::new() };
        let parts = 48;
        let cells: String = (0..parts)
            .map(|i| {
                let [r, g, b] = palette.at((i as f64 + 0.5) / f64::from(parts)).to_rgb();
                format!(
                    "<rect x=\"{i}\" y=\"0\" width=\"1.05\" height=\"1\" fill=\"#{r:02x}{g:02x}{b:02x}\"/>"
                )
            })
            .collect();
        format!(
            "<div class=\"scale\"><span>{} {unit}</span><svg viewBox=\"0 0 {parts} 1\" preserveAspectRatio=\"none\" \
             aria-hidden=\"true\">{cells}</svg><span>{} {unit}</span></div>\n",
            number(range.low),
            number(range.high),
            unit = escape(unit)
        )
    }
}

/// A raster of `columns` values a row as an `img`, `repeat` picture pixels a value; missing ones are hatched grey.
///
/// # Errors
/// When the picture would be too large.
pub fn picture(
    values: &[f64],
    columns: usize,
    repeat: usize,
    paint: &Paint,
    (class, alt): (&str, &str),
) -> Result<String> {
    let columns = columns.max(1);
    let rows = values.len() / columns;
    let mut picture = Picture::new(columns * repeat, rows * repeat, MISSING_GROUND)?;
    let hatch = Oklab::to_rgb(MISSING_HATCH);
    for (i, v) in values.iter().enumerate() {
        let (r, c) = (i / columns * repeat, i % columns * repeat);
        if v.is_nan() {
            for y in r..r + repeat {
                for x in c..c + repeat {
                    if (x + y) % 6 == 0 {
                        picture.fill(x, y, 1, 1, hatch);
                    }
                }
            }
        } else {
            picture.fill(c, r, repeat, repeat, paint.colour(*v));
        }
    }
    let png = base64::engine::general_purpose::STANDARD.encode(picture.to_png()?);
    Ok(format!(
        "<img class=\"{class}\" width=\"{}\" height=\"{}\" alt=\"{}\" src=\"data:image/png;base64,{png}\">",
        columns * repeat,
        rows * repeat,
        escape(alt)
    ))
}

/// Short text of a number.
pub(super) fn number(v: f64) -> String {
    let size = v.abs();
    if v == 0.0 {
        "0".into()
    } else if (1e-3..1e5).contains(&size) {
        let decimals = (3.0 - size.log10().floor()).clamp(0.0, 6.0) as usize;
        let text = format!("{v:.decimals$}");
        if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').into() } else { text }
    } else {
        format!("{v:.2e}")
    }
}

/// A figure that shows one of two pictures, with a switch.
pub fn flick(names: (&str, &str), pictures: (&str, &str), below: &str, caption: &str) -> String {
    let (first, second) = (escape(names.0), escape(names.1));
    format!(
        "<figure class=\"flick\" data-shown=\"first\" data-first=\"{first}\" data-second=\"{second}\">\n\
         <div class=\"bar\"><button class=\"turn\" type=\"button\" aria-pressed=\"false\">Flick</button>\
         <button class=\"auto\" type=\"button\" aria-pressed=\"false\">By itself</button>\
         <span>Shown: <span class=\"shown\" role=\"status\">{first}</span></span></div>\n\
         <div class=\"stack\">{}{}</div>\n{below}<figcaption>{}</figcaption></figure>\n",
        pictures.0,
        pictures.1,
        escape(caption)
    )
}
