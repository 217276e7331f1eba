//! A ledger in plain words.

use super::Ledger;

impl Ledger {
    /// What a person wants to know of the run, a line each.
    pub fn summary(&self) -> Vec<String> {
        let out = &self.output;
        let mut lines = vec![format!(
            "{}: {} x {} pixels{} of {}, by {} ({})",
            out.path.display(),
            out.rows,
            out.columns,
            if out.bands > 1 { format!(" x {} bands", out.bands) } else { String::new() },
            out.sample_type.name(),
            self.kernel.name,
            match self.method.as_str() {
                "copy" => "copied, nothing was computed".to_owned(),
                method if self.reduce == "none" => method.replace('-', " "),
                method => format!(
                    "{}, {} against aliasing",
                    method.replace('-', " "),
                    match self.reduce.as_str() {
                        "widen" => "widened".to_owned(),
                        other => other.replace('-', " "),
                    }
                ),
            }
        )];
        if self.method != "copy" {
            let moved = self.displacement.rows.hypot(self.displacement.columns);
            let mut cost =
                format!("{:.0} % of detail at 4 pixels a cycle is left", 100.0 * self.blur.transfer.at_025);
            if let Some(over) = self.ringing.step_overshoot {
                cost += &if over == 0.0 {
                    "; edges do not overshoot".to_owned()
                } else {
                    format!("; edges overshoot by up to {:.1} %", 100.0 * over)
                };
            }
            cost += &if moved < 5e-4 {
                "; nothing is displaced".to_owned()
            } else {
                format!("; content is displaced by {moved:.3} pixels")
            };
            lines.push(format!("cost: {cost}"));
            lines.push(format!(
                "noise: variance x {:.2} ({:.2} to {:.2}), neighbours now correlated by {:.2} (next row) and {:.2} (next column)",
                self.noise.gain_mean, self.noise.gain_min, self.noise.gain_max, self.noise.lag1_rows, self.noise.lag1_columns
            ));
        }
        if let Some(c) = self.flux.closure {
            let what = if self.values == "total" {
                "counts, all accounted for"
            } else {
                "signal over the common region"
            };
            lines.push(format!(
                "{what}: {:+.2e} of its sum{}",
                c,
                match self.flux.closed {
                    Some(true) => " (within the tolerance)",
                    Some(false) => " (TOLERANCE EXCEEDED)",
                    None => "",
                }
            ));
        }
        let told = |v: Option<f64>| v.filter(|v| v.abs() > 0.0);
        if let Some(left) = told(self.flux.left_frame) {
            lines.push(format!("left the frame: {left:.6e} of {:.6e}", self.flux.before.unwrap_or(0.0)));
        }
        if let (Some(filled), Some(lost)) = (told(self.flux.filled_at_gaps), self.flux.lost_in_gaps) {
            lines.push(format!(
                "at gaps: {filled:.3e} filled in for what is missing, {lost:.3e} fell into missing pixels"
            ));
        }
        if let Some(moved) = told(self.flux.limited) {
            let to = if self.values == "total" { "handed to neighbours" } else { "cut off" };
            let rest = told(self.flux.beyond_limits)
                .map_or(String::new(), |b| format!("; {b:.3e} found no room and stays beyond"));
            lines.push(format!(
                "held to the range around: {} pixels, {moved:.3e} {to}{rest}",
                self.pixels.limited
            ));
        }
        if let (Some(of_10), true) = (self.noise.sum_underestimated.of_10, self.method != "copy") {
            lines.push(format!(
                "sums over 10 x 10 pixels are {of_10:.2} times as uncertain as independent pixels would say"
            ));
        }
        let p = &self.pixels;
        let share = |n: u64| 100.0 * n as f64 / p.total.max(1) as f64;
        if p.missing > 0 {
            lines.push(format!("missing: {} pixels ({:.2} %)", p.missing, share(p.missing)));
        }
        if p.clipped_low + p.clipped_high > 0 {
            lines.push(format!(
                "clipped to the type's range: {} pixels below, {} above",
                p.clipped_low, p.clipped_high
            ));
        }
        if p.moved_off_code > 0 {
            lines.push(format!("moved by one off the no-data code: {} pixels", p.moved_off_code));
        }
        if let Some(bias) = self.flux.rounding.filter(|b| p.valid > 0 && *b != 0.0) {
            lines.push(format!(
                "rounding to {} shifted the mean by {:+.1e}",
                out.sample_type.name(),
                bias / p.valid as f64
            ));
        }
        lines
    }
}
