//! An audit in plain words.

use super::audit::Audit;
use crate::measure::audit::{Kind, LossKind};

impl Audit {
    /// What a person wants to know, a line each.
    pub fn summary(&self) -> Vec<String> {
        let mut lines = vec![self.headline()];
        lines.extend(self.signal());
        lines.extend(self.displaced());
        lines.extend(self.blurred());
        lines.extend(self.folded());
        lines.extend(self.missing());
        lines.extend(self.clipped());
        lines.extend(self.checks.iter().filter(|c| c.asked || c.held == Some(false)).map(|c| {
            let value = c.value.map_or("cannot be judged".to_owned(), |v| format!("{v:.3e}"));
            let sign = if c.name == "mtf50" { "at least" } else { "at most" };
            let held = if c.held == Some(true) { "holds" } else { "DOES NOT HOLD" };
            format!("check: {} {value}, {sign} {}: {held}", c.name, c.bound)
        }));
        lines
    }

    fn headline(&self) -> String {
        let names = |i: usize| {
            self.inputs.get(i).map_or(String::new(), |e| {
                format!("{} ({} x {} of {})", e.path.display(), e.rows, e.columns, e.sample_type.name())
            })
        };
        let by = match self.relation.by.as_str() {
            "world" => "by their georeference",
            "map" => "by the map",
            _ => "by their outer edges",
        };
        format!("{} judged against {}, laid on each other {by}", names(1), names(0))
    }

    fn signal(&self) -> Vec<String> {
        let Some(c) = self.flux.closure else {
            return vec![
                "signal: nothing to compare: no common region with samples, or all of them are 0 or infinite"
                    .into(),
            ];
        };
        let mut line = format!("signal over the common region: {c:+.2e} of its sum");
        let map = &self.closure_map;
        let word = if c < 0.0 { "loss" } else { "gain" };
        match self.loss.kind {
            LossKind::None => {}
            LossKind::Even => {
                let typical = 100.0 * self.loss.typical.unwrap_or(c);
                line += &format!(": an even {word} of {:.2} % everywhere", typical.abs());
            }
            LossKind::Local => {
                let share: f64 = self.loss.cells.iter().map(|[r, k]| map.share[r * map.columns + k]).sum();
                let [r0, r1, c0, c1] =
                    self.loss.cells.iter().fold([usize::MAX, 0, usize::MAX, 0], |b, [r, k]| {
                        [
                            b[0].min(map.row_edges[*r]),
                            b[1].max(map.row_edges[r + 1]),
                            b[2].min(map.column_edges[*k]),
                            b[3].max(map.column_edges[k + 1]),
                        ]
                    });
                line += &format!(
                    ": local: {} of {} cells account for {share:+.2e}, within AFTER's rows {r0} to {}, columns {c0} to {}",
                    self.loss.cells.len(),
                    map.rows * map.columns,
                    r1.saturating_sub(1),
                    c1.saturating_sub(1)
                );
            }
            LossKind::Uneven => {
                let spread = 100.0 * self.loss.spread.unwrap_or(0.0);
                line += &format!(": uneven: cells scatter by {spread:.2} %");
            }
        }
        vec![line]
    }

    fn displaced(&self) -> Vec<String> {
        let f = &self.displacement_field;
        let looked = f.tiles.len();
        let mut lines = Vec::new();
        match (&f.verdict, &f.field) {
            (Some(v), Some(field)) => {
                let d = field.at_centre;
                let mut line = format!(
                    "displacement: {}, {} +- {:.3} px of BEFORE in the middle (rows, columns; + = down, right): {}",
                    signed(d[0]),
                    signed(d[1]),
                    field.sigma,
                    v.words
                );
                if let Some(largest) = f.largest.filter(|_| v.kind != Kind::None && v.kind != Kind::Constant)
                {
                    line += &format!("; up to {largest:.3} px within the frame");
                }
                lines.push(line);
                if let Some(cause) = &v.cause {
                    lines.push(format!("likely cause: {cause}"));
                }
            }
            _ => {
                let why = if looked == 0 {
                    "the rasters are too small to be compared in tiles"
                } else if f.flat >= f.with_gaps.max(f.unlike) {
                    "there is too little texture to tell"
                } else if f.with_gaps >= f.unlike {
                    "too many samples are missing"
                } else {
                    "the two rasters do not show the same"
                };
                lines.push(format!("displacement: cannot be measured: {why}"));
            }
        }
        if looked > f.voted {
            let mut why = Vec::new();
            for (n, words) in
                [(f.flat, "too little texture"), (f.with_gaps, "gaps"), (f.unlike, "nothing alike")]
            {
                if n > 0 {
                    why.push(format!("{n} {words}"));
                }
            }
            lines.push(format!("tiles: {} of {looked} have a vote (without: {})", f.voted, why.join(", ")));
        }
        lines
    }

    fn blurred(&self) -> Vec<String> {
        let Some(s) = self.spectra.as_ref().and_then(|s| s.sharpness.as_ref()) else {
            return vec!["blur: cannot be measured: no patch without gaps that has detail".into()];
        };
        let nyquist = self.spectra.as_ref().map_or(0.5, |s| s.curve.nyquist);
        let part = |t: Option<f64>, f: &str| match t {
            Some(t) => format!("{:.0} % at {f}", 100.0 * t),
            None => format!("unknown at {f}"),
        };
        let mut line = format!(
            "detail left: {}, {}, {} cycles per pixel of BEFORE; half at {:.3}{}",
            part(s.transfer[0], "0.10"),
            part(s.transfer[1], "0.25"),
            part(s.transfer[2], "0.40"),
            s.mtf50,
            if s.mtf50 >= nyquist - 1e-9 { " (the coarser grid's Nyquist frequency) or beyond" } else { "" }
        );
        if s.judged_up_to < 0.85 * nyquist {
            line += &format!("; BEFORE has too little detail above {:.2} to tell", s.judged_up_to);
        }
        let mut lines = vec![line];
        if s.is_gaussian {
            lines.push(format!("blur: as by a Gaussian of sigma {:.2} px of BEFORE", s.gaussian_sigma));
        }
        let uneven = 0.1;
        if s.axes_differ_by > uneven {
            lines.push(format!(
                "blur: unlike along rows and columns, by {:.0} % of detail (root mean square over frequency)",
                100.0 * s.axes_differ_by
            ));
        }
        lines
    }

    fn folded(&self) -> Vec<String> {
        let Some(a) = &self.aliasing else { return Vec::new() };
        let mut lines = Vec::new();
        if let (Some(share), Some(fraction)) = (a.folded_share, a.folded_fraction)
            && share > 1e-3
            && fraction > 0.25
        {
            let how = if fraction > 0.6 {
                "reduced without anti-aliasing"
            } else {
                "weakly protected against aliasing, as by an average over pixels"
            };
            lines.push(format!(
                "aliasing: {how}: {:.1} % of AFTER's detail is finer content folded down ({:.0} % of what no protection lets through, in amplitude)",
                100.0 * share,
                100.0 * fraction
            ));
        }
        if a.other_share > 0.05 {
            lines.push(format!(
                "noise: {:.1} % of AFTER's detail has no origin in BEFORE (noise, rounding, artefacts)",
                100.0 * a.other_share
            ));
        }
        lines
    }

    fn missing(&self) -> Vec<String> {
        let g = &self.gaps;
        let said = [
            (g.appeared, "samples became missing in the middle of BEFORE's samples"),
            (g.leaked, "numbers stand where BEFORE has no sample at all: a gap was filled"),
            (
                g.mixed_with_code,
                "numbers near gaps lie between the no-data code and the data: the code was averaged into them",
            ),
            (g.invented_outside, "numbers stand wholly outside BEFORE"),
        ];
        said.iter().filter(|(n, _)| *n > 0).map(|(n, words)| format!("gaps: {n} {words}")).collect()
    }

    fn clipped(&self) -> Vec<String> {
        let c = &self.clipping;
        let share = |n: u64| 100.0 * n as f64 / c.samples.max(1) as f64;
        let mut lines = Vec::new();
        for (n, value, end) in [(c.low, c.low_value, "below"), (c.high, c.high_value, "above")] {
            if let Some(value) = value.filter(|_| n > 0) {
                lines.push(format!(
                    "clipping: {n} samples ({:.2} %) stand at {value}{}; BEFORE has none such there: cut off {end}",
                    share(n),
                    if c.at_type_limit { ", the limit of AFTER's type" } else { "" }
                ));
            }
        }
        let over = c.above_range + c.below_range;
        if over > 0 {
            lines.push(format!(
                "overshoot: {over} samples ({:.2} %) lie outside BEFORE's range, by up to {:.3e}",
                share(over),
                c.most_above.max(c.most_below)
            ));
        }
        lines
    }
}

/// A displacement with its sign, but none where there is nothing.
pub(super) fn signed(v: f64) -> String {
    if v.abs() < 5e-4 { "0".into() } else { format!("{v:+.3}") }
}
