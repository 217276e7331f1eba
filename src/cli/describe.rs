//! `regauge describe`: what is in a file.

use super::common::say_notes;
use super::progress::Bar;
use super::{Outcome, print, print_json};
use crate::error::Result;
use crate::grid::Sampling;
use crate::job::{BandStatistics, describe};
use crate::raster::{self, Header};
use clap::Args;
use std::path::PathBuf;

/// What is in a file: grid, samples, missing, statistics.
#[derive(Args)]
#[command(after_help = "Examples:\n  regauge describe dem.tif\n  regauge describe cells.ome.tif --json")]
pub struct Arguments {
    /// Raster to describe
    #[arg(value_name = "IN")]
    input: PathBuf,
    /// A code that means "no data", beside NaN and what the file declares
    #[arg(long, value_name = "V", allow_hyphen_values = true)]
    missing: Option<f64>,
    /// Print as JSON
    #[arg(long)]
    json: bool,
}

pub fn run(a: &Arguments) -> Result<Outcome> {
    let source = raster::open(&a.input)?;
    let bar = Bar::new(&a.input.display().to_string(), false);
    let result = describe(source.as_ref(), a.missing, &bar);
    bar.clear();
    let (bands, sha256) = result?;
    let header = source.header();
    say_notes(&a.input, &header.storage.notes, false);
    if a.json {
        print_json(&serde_json::json!({
            "path": a.input, "sha256": sha256, "grid": header.grid, "bands": header.bands, "type": header.sample_type,
            "band_names": header.band_names, "missing_code": header.missing.map(|m| if m.is_nan() { "nan".to_owned() } else { m.to_string() }),
            "statistics": bands,
        }))?;
    } else {
        print(&in_words(&a.input.display().to_string(), header, &bands, &sha256))?;
    }
    Ok(Outcome::Done)
}

fn in_words(name: &str, header: &Header, bands: &[BandStatistics], sha256: &str) -> String {
    let g = &header.grid;
    let mut t = format!("{name}\n");
    let mut line = |key: &str, value: String| t += &format!("  {key:<12}{value}\n");
    line("size", format!("{} rows x {} columns", g.rows, g.columns));
    line(
        "bands",
        match header.storage.pages {
            p if p > 1 => format!("{} ({p} pages)", header.bands),
            _ => header.bands.to_string(),
        },
    );
    line("type", header.sample_type.name().into());
    let unit = g.unit.clone().unwrap_or_default();
    if g.world.is_some() {
        let (h, w) = g.pixel_size();
        line("pixel", format!("{h} high, {w} wide {unit}").trim_end().to_owned());
        line(
            "sample",
            match g.sample {
                Sampling::Area => "area",
                Sampling::Point => "point",
            }
            .into(),
        );
        let corner = |r: f64, c: f64| {
            let (x, y) = g.world_at(r, c);
            format!("({x}, {y})")
        };
        line("first pixel", format!("centre {}, outer corner {}", corner(0.0, 0.0), corner(-0.5, -0.5)));
        line(
            "last pixel",
            format!(
                "centre {}, outer corner {}",
                corner(g.rows as f64 - 1.0, g.columns as f64 - 1.0),
                corner(g.rows as f64 - 0.5, g.columns as f64 - 0.5)
            ),
        );
    } else {
        line("place", "none: pixels are all there is".into());
    }
    if let Some(crs) = &g.crs {
        line("CRS", crs.clone());
    }
    if let Some(code) = header.missing {
        line("no data", code.to_string());
    }
    line("digest", sha256.into());
    for (i, b) in bands.iter().enumerate() {
        let name = header
            .band_names
            .get(i)
            .filter(|n| !n.is_empty())
            .map_or_else(|| format!("band {}", i + 1), |n| format!("band {} \"{n}\"", i + 1));
        let number = |v: Option<f64>| {
            v.map_or("-".into(), |v| format!("{v:.6}").trim_end_matches('0').trim_end_matches('.').to_owned())
        };
        t += &format!(
            "  {name}: min {}, max {}, mean {}, std {}, missing {}\n",
            number(b.min),
            number(b.max),
            number(b.mean),
            number(b.std),
            b.missing
        );
    }
    t
}
