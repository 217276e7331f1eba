//! The page of a run: before and after, where signal went, what the kernel does, the numbers.

use super::figure::number;
use super::plot::{Bars, Lines, Series, bars, heat, lines};
use super::{Paint, Range, Tile, flick, page, percent, picture, section, table, tiles, words};
use crate::error::Result;
use crate::report::Ledger;
use crate::report::palette::Palette;

/// The pictures of one band, on the output's grid: row by row, NaN = missing.
#[derive(Clone, Debug)]
pub struct BandPictures {
    /// What the band is called; empty where there is but one.
    pub name: String,
    /// Values in a row of a picture.
    pub columns: usize,
    /// Picture pixels a value.
    pub repeat: usize,
    /// The input's nearest samples.
    pub before: Vec<f64>,
    /// The output.
    pub after: Vec<f64>,
    /// Output less input, the input looked at linearly; empty where a difference means nothing.
    pub difference: Vec<f64>,
    /// How the pictures were reduced; may be empty.
    pub note: String,
}

/// What a page shows of one run beside its ledger.
pub struct RunPictures {
    /// The bands that are shown.
    pub bands: Vec<BandPictures>,
    /// How many are not.
    pub hidden: usize,
    /// Whether the values are class codes.
    pub classes: bool,
    /// Frequency (cycles per input pixel), mean transfer over sub-pixel phase, and the worst.
    pub transfer: Vec<[f64; 3]>,
    /// The output's Nyquist frequency in cycles per input pixel.
    pub nyquist: f64,
    /// Position (input pixels from an edge) and the response to the edge; empty where there is none of finite reach.
    pub step: Vec<(f64, f64)>,
    /// Share of output pixels by sub-pixel phase, along rows and along columns.
    pub phases: [Vec<f64>; 2],
}

/// The page of some runs, one after the other.
///
/// # Errors
/// When a picture cannot be made.
pub fn ledger_page(runs: &[(Ledger, RunPictures)]) -> Result<String> {
    let title = match runs {
        [(one, _)] => format!("{}: what the resampling cost", name_of(one)),
        many => format!("{} rasters on one grid: what it cost", many.len()),
    };
    let mut body = String::new();
    for (ledger, pictures) in runs {
        if runs.len() > 1 {
            body += &format!("<h2>{}</h2>\n", super::escape(&name_of(ledger)));
        }
        body += &run(ledger, pictures)?;
    }
    let command = runs.first().map(|r| r.0.command.clone()).unwrap_or_default();
    Ok(page(&title, "A ledger of measurements that were put on another grid", &body, &command))
}

fn name_of(ledger: &Ledger) -> String {
    ledger.output.path.file_name().map(|n| n.to_string_lossy().into_owned()).unwrap_or_default()
}

fn run(ledger: &Ledger, p: &RunPictures) -> Result<String> {
    let mut out = tiles(&at_a_glance(ledger));
    out += &section("In words", &words(&ledger.summary()));
    for band in &p.bands {
        out += &before_and_after(band, p.classes)?;
    }
    if p.hidden > 0 {
        out += &format!("<p>{} more bands are not shown; the numbers hold for all.</p>\n", p.hidden);
    }
    let mut pair = String::new();
    for band in p.bands.iter().filter(|b| !b.difference.is_empty()) {
        pair += &difference(band)?;
    }
    out += &format!("<div class=\"pair\">\n{pair}{}</div>\n", closure(ledger));
    out += &section("What the kernel does", &kernel(ledger, p));
    let table = table(&serde_json::to_value(ledger).unwrap_or_default(), meaning);
    out += &section(
        "All numbers",
        &format!("<details open><summary>The ledger, key by key</summary>\n{table}</details>\n"),
    );
    Ok(out)
}

fn before_and_after(p: &BandPictures, classes: bool) -> Result<String> {
    let both: [&[f64]; 2] = [&p.before, &p.after];
    let paint =
        if classes { Paint::classes(&both) } else { Paint::Scale(Palette::Sequential, Range::of(&both)) };
    let shown = |v: &[f64], class, alt: &str| picture(v, p.columns, p.repeat, &paint, (class, alt));
    let pictures = (
        shown(&p.before, "first", "The input, its nearest samples on the output's grid")?,
        shown(&p.after, "second", "The output")?,
    );
    let note = if p.note.is_empty() { String::new() } else { format!(" {}.", p.note) };
    let colours = if classes {
        "Each class has its colour"
    } else {
        "Colours run from the 1st to the 99.5th percentile of both"
    };
    let caption = format!(
        "Before: the input's own samples, each output place showing the nearest. After: the output. {colours}; hatched grey is \
         missing.{note}"
    );
    let figure = flick(("Before", "After"), (&pictures.0, &pictures.1), &paint.key(""), &caption);
    Ok(section(&of_band("Before and after", &p.name), &figure))
}

/// A heading that names the band, if it has a name.
fn of_band(heading: &str, name: &str) -> String {
    if name.is_empty() { heading.into() } else { format!("{heading}: {name}") }
}

/// The section that shows output less input.
fn difference(p: &BandPictures) -> Result<String> {
    let paint = Paint::Scale(Palette::Diverging, Range::about_zero(&p.difference));
    let alt = ("", "Output less input on the output's grid");
    let difference = picture(&p.difference, p.columns, p.repeat, &paint, alt)?;
    let shown = format!(
        "<figure>{difference}{}<figcaption>Output less input, the input looked at by linear interpolation: rust where the output is \
         lower, blue where it is higher. What stands here is the kernel's doing and that of the linear look together; on a reduced \
         picture also what its own sampling misses.</figcaption></figure>",
        paint.key("")
    );
    Ok(section(&of_band("Difference", &p.name), &shown))
}

fn at_a_glance(l: &Ledger) -> Vec<Tile> {
    let mut all = Vec::new();
    if let Some(c) = l.flux.closure {
        let note = if l.values == "total" {
            "of the counts, everything accounted for"
        } else {
            "of the signal that both cover"
        };
        all.push(Tile { holds: l.flux.closed, ..Tile::new("Signal gained or lost", percent(c), note) });
    }
    if let Some(left) = l.flux.left_frame.filter(|v| *v != 0.0) {
        all.push(Tile::new("Left the frame", number(left), "counts beyond the output's edges"));
    }
    let detail = format!("{:.0} %", 100.0 * l.blur.transfer.at_025);
    all.push(Tile::new("Detail left", detail, "at 4 input pixels a cycle"));
    let moved = l.displacement.rows.hypot(l.displacement.columns);
    all.push(Tile::new("Displaced by", format!("{moved:.3} px"), "input pixels, mean over phase"));
    if let Some(o) = l.ringing.step_overshoot {
        all.push(Tile::new(
            "Edges overshoot by",
            format!("{:.1} %", 100.0 * o),
            "of a step's height, at most",
        ));
    }
    all.push(Tile::new(
        "Noise variance",
        format!("× {:.2}", l.noise.gain_mean),
        &format!("{:.2} to {:.2} over sub-pixel phase", l.noise.gain_min, l.noise.gain_max),
    ));
    if let Some(f) = l.noise.sum_underestimated.of_10 {
        all.push(Tile::new(
            "Sums over 10 × 10",
            format!("× {f:.2}"),
            "as uncertain as independent pixels would say",
        ));
    }
    let share = 100.0 * l.pixels.missing as f64 / l.pixels.total.max(1) as f64;
    all.push(Tile::new("Missing", format!("{share:.2} %"), &format!("{} pixels", l.pixels.missing)));
    all
}

fn closure(l: &Ledger) -> String {
    let Some(local) = &l.flux.local_closure else { return String::new() };
    let most = most_of(&local.values);
    let map = heat(
        "Local closure on a coarse grid over the output",
        (local.rows, local.columns),
        &local.values,
        most,
        percent,
    );
    let paint = Paint::Scale(Palette::Diverging, Range { low: -100.0 * most, high: 100.0 * most });
    section(
        "Where signal went",
        &format!(
            "<figure>{map}{}<figcaption>(after − before) / |before| of each part of {} × {} output pixels. Small values of both signs \
             side by side are signal that crossed a border between parts.</figcaption></figure>",
            paint.key("%"),
            local.cell[0],
            local.cell[1]
        ),
    )
}

/// What the ends of a closure map stand for: the 95th percentile, since parts with next to no signal may be off by any share.
pub(super) fn most_of(values: &[Option<f64>]) -> f64 {
    let mut all: Vec<f64> = values.iter().flatten().map(|v| v.abs()).filter(|v| v.is_finite()).collect();
    all.sort_by(f64::total_cmp);
    all.get((all.len().saturating_sub(1)) * 95 / 100).copied().unwrap_or(0.0).max(1e-12)
}

fn kernel(l: &Ledger, p: &RunPictures) -> String {
    let line = |name: &str, pick: usize| Series {
        name: name.into(),
        points: p.transfer.iter().map(|t| (t[0], t[pick])).collect(),
    };
    let most = p.transfer.iter().map(|t| t[1].max(t[2])).fold(1.0, f64::max);
    let mut out = lines(&Lines {
        title: format!("Transfer of {} over frequency", l.kernel.name),
        x: ("cycles per input pixel".into(), 0.0, 0.5),
        y: ("transfer".into(), 0.0, 1.08 * most),
        series: vec![line("mean", 1), line("worst phase", 2)],
        marks: if p.nyquist < 0.499 { vec![(p.nyquist, "output's Nyquist".into())] } else { Vec::new() },
    });
    let mut right = String::new();
    if !p.step.is_empty() {
        let low = p.step.iter().map(|s| s.1).fold(0.0, f64::min);
        let high = p.step.iter().map(|s| s.1).fold(1.0, f64::max);
        let ends = (p.step.first().map_or(-5.0, |s| s.0), p.step.last().map_or(5.0, |s| s.0));
        right = lines(&Lines {
            title: format!(
                "Response of {} to a step, overshoot {:.1} %",
                l.kernel.name,
                100.0 * (high - 1.0)
            ),
            x: ("input pixels from the edge".into(), ends.0, ends.1),
            y: ("response to a step".into(), low - 0.06, high + 0.06),
            series: vec![Series { name: l.kernel.name.clone(), points: p.step.clone() }],
            marks: vec![(0.0, "edge".into())],
        });
    }
    let phases = bars(&Bars {
        title: "How output pixels lie between input samples".into(),
        x: ("sub-pixel phase, input pixels".into(), 0.0, 1.0),
        y: "share of pixels".into(),
        groups: vec![("rows".into(), p.phases[0].clone()), ("columns".into(), p.phases[1].clone())],
    });
    let figure =
        |plot: &str, caption: &str| format!("<figure>{plot}<figcaption>{caption}</figcaption></figure>\n");
    out = figure(
        &out,
        "What is left of waves of each frequency: 1 is all of it. Mean over sub-pixel phase, and the phase that loses most.",
    );
    if !right.is_empty() {
        out += &figure(&right, "What becomes of an edge: above 1 and below 0 it rings.");
    }
    out += &figure(
        &phases,
        "Phase 0 is on a sample, 0.5 halfway between two, where kernels blur most and noise is lowest.",
    );
    format!("<div class=\"pair\">\n{out}</div>\n")
}

/// What the keys of a ledger mean.
fn meaning(key: &str) -> Option<&'static str> {
    Some(match key {
        "kernel.taps" => "samples that weigh in along an axis",
        "kernel.order" => "the error falls with this power of the pixel size",
        "kernel.poles" => "of the prefilter",
        "extension" => "what stood beyond the edges",
        "values" => "what a number is",
        "reduce" => "what was done against aliasing",
        "method" => "the pass",
        "pixels.total" => "output samples",
        "pixels.clipped_low" | "pixels.clipped_high" => "held at an end of the type's range",
        "pixels.overshoot" => "outside the range of the input's samples",
        "pixels.near_gap" => "leaning on missing samples by more than 1e-3",
        "pixels.moved_off_code" => "moved by one off the no-data code",
        "pixels.limited" => "held to the range of the samples around",
        "flux.before" => "signal that went in, over the region that both cover",
        "flux.after" => "signal that came out",
        "flux.left_frame" => "counts beyond the output's edges",
        "flux.filled_at_gaps" => "given to pixels near gaps for what is missing of them",
        "flux.lost_in_gaps" => "fallen into pixels that are missing",
        "flux.limited" => "moved or cut off by --limit",
        "flux.beyond_limits" => "still beyond the limits",
        "flux.rounding" => "stored less computed",
        "flux.closure" => "(after − before) / |before|, everything accounted for",
        "flux.tolerance" => "the bound asked for",
        "flux.closed" => "whether the bound holds",
        "displacement.rows" => "input pixels, positive down",
        "displacement.columns" => "input pixels, positive right",
        "displacement.sigma" => "spread over sub-pixel phase",
        "blur.mtf50" => "cycles per input pixel where half of the detail is left",
        "ringing.step_overshoot" => "of a step's height",
        "noise.gain_mean" => "variance of an output pixel over that of a sample",
        "noise.lag1_rows" => "correlation with the pixel in the next row",
        "noise.lag1_columns" => "correlation with the pixel in the next column",
        _ if key.starts_with("blur.transfer") => "transfer at that many cycles per input pixel",
        _ if key.starts_with("noise.sum_underestimated") => {
            "factor on the uncertainty of a sum over so many pixels a side if correlation is forgotten"
        }
        _ if key.starts_with("centroid") => "centre of the signal: row, column of the input",
        _ if key.ends_with("sha256") => "digest of samples and grid",
        _ => return None,
    })
}
