//! The page of an audit: both rasters, where signal went, how far content is displaced, what detail is left.

use super::plot::{Arrow, Lines, Series, arrows, heat, lines};
use super::{BandPictures, Paint, Range, Tile, flick, page, percent, picture, section, table, tiles, words};
use crate::error::Result;
use crate::report::Audit;
use crate::report::audit_words::signed;
use crate::report::palette::Palette;

/// The page of an audit with the pictures of its band.
///
/// # Errors
/// When a picture cannot be made.
pub fn audit_page(audit: &Audit, p: &BandPictures) -> Result<String> {
    let mut all = Vec::new();
    if let Some(c) = audit.flux.closure {
        let note = "of the signal that both cover";
        all.push(Tile { holds: audit.flux.closed, ..Tile::new("Signal gained or lost", percent(c), note) });
    }
    let moved = match (audit.displacement.rows, audit.displacement.columns) {
        (Some(r), Some(c)) => {
            format!("{}, {} px", signed(r), signed(c))
        }
        _ => "not measured".into(),
    };
    all.push(Tile::new(
        "Displaced by",
        moved,
        "rows, columns in the middle; input pixels, + is down and right",
    ));
    if let Some(t) = audit.blur.transfer.at_025 {
        all.push(Tile::new("Detail left", format!("{:.0} %", 100.0 * t), "at 4 input pixels a cycle"));
    }
    all.push(Tile::new(
        "Half of the detail",
        format!("{:.3}", audit.blur.mtf50),
        "cycles per input pixel (mtf50)",
    ));
    for c in &audit.checks {
        let text = match c.held {
            Some(true) => "holds",
            Some(false) => "does not hold",
            None => "cannot be judged",
        };
        let note = format!("bound {}", super::figure::number(c.bound));
        all.push(Tile { holds: c.held, ..Tile::new(&format!("Check: {}", c.name), text.into(), &note) });
    }
    let mut body = tiles(&all) + &section("In words", &words(&audit.summary()));
    let paint = Paint::Scale(Palette::Sequential, Range::of(&[&p.before, &p.after]));
    let shown = |v: &[f64], class, alt| picture(v, p.columns, p.repeat, &paint, (class, alt));
    let pair = (
        shown(&p.before, "first", "BEFORE, its nearest samples on AFTER's grid")?,
        shown(&p.after, "second", "AFTER")?,
    );
    let caption = "BEFORE laid on AFTER's grid as the grids (or the map) say. If content jumps when the picture flicks, it is displaced. \
                   Hatched grey is missing.";
    body += &section(
        "Before and after",
        &flick(("Before", "After"), (&pair.0, &pair.1), &paint.key(""), caption),
    );
    let map = &audit.closure_map;
    let most = super::ledger::most_of(&map.closure);
    let cells = heat("Local closure over AFTER", (map.rows, map.columns), &map.closure, most, percent);
    let went = format!(
        "<figure>{cells}{}<figcaption>(after − before) / |before| of each part.</figcaption></figure>",
        Paint::Scale(Palette::Diverging, Range { low: -100.0 * most, high: 100.0 * most }).key("%")
    );
    let field = field(audit);
    body += &format!("<div class=\"pair\">\n{}{field}</div>\n", section("Where signal went", &went));
    if let Some(spectrum) = &audit.spectra {
        let rings = &spectrum.curve.rings;
        let points: Vec<(f64, f64)> =
            rings.iter().map(|r| (r.frequency, if r.judged { r.transfer } else { f64::NAN })).collect();
        let most = points.iter().map(|p| p.1).filter(|v| v.is_finite()).fold(1.0, f64::max).min(2.0);
        let plot = lines(&Lines {
            title: "What is left of BEFORE's detail over frequency".into(),
            x: ("cycles per input pixel".into(), 0.0, 0.5),
            y: ("transfer".into(), 0.0, 1.08 * most),
            series: vec![Series { name: "AFTER over BEFORE".into(), points }],
            marks: vec![(audit.blur.mtf50, "half".into())],
        });
        let caption = "From the cross-spectrum, so that noise and aliasing do not count as detail. It breaks where BEFORE has too little detail.";
        body += &section("Detail", &format!("<figure>{plot}<figcaption>{caption}</figcaption></figure>"));
    }
    body += &section("All numbers", &table(&serde_json::to_value(audit).unwrap_or_default(), |_| None));
    let name = |i: usize| audit.inputs.get(i).map_or(String::new(), |r| r.path.display().to_string());
    let title = format!("Audit of {}", name(1));
    Ok(page(&title, &format!("judged against {}", name(0)), &body, &audit.command))
}

fn field(audit: &Audit) -> String {
    let tiles = &audit.displacement_field.tiles;
    let Some(input) = audit.inputs.first() else { return String::new() };
    let size = (input.rows as f64, input.columns as f64);
    let most = tiles
        .iter()
        .filter_map(|t| t.displacement)
        .map(|d| d[0].hypot(d[1]))
        .filter(|v| v.is_finite())
        .fold(0.0, f64::max);
    // The longest arrow covers a fourteenth of the longer side.
    let factor = if most > 0.0 { size.0.max(size.1) / 14.0 / most } else { 1.0 };
    let all: Vec<Arrow> = tiles.iter().map(|t| Arrow { at: t.at, by: t.displacement }).collect();
    let plot = arrows("Displacement of each tile", size, &all, factor);
    section(
        "Displacement",
        &format!(
            "<figure>{plot}<figcaption>Each arrow is a tile's displacement, drawn {factor:.0} times as long; the longest is {most:.3} \
             input pixels. Dots are tiles without a vote.</figcaption></figure>"
        ),
    )
}
