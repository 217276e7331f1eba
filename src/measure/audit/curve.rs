//! The transfer over frequency, and the few numbers that tell it.

use serde::Serialize;
use std::f64::consts::PI;

/// One ring of frequencies.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Ring {
    /// Cycles per input pixel, where BEFORE's power in the ring lies on average.
    pub frequency: f64,
    /// What AFTER kept of BEFORE, contrast included.
    pub transfer: f64,
    /// The same along rows (down) alone; null where no bin lies near that axis.
    pub rows: Option<f64>,
    /// The same along columns (right) alone.
    pub columns: Option<f64>,
    /// The same for a reduction without protection.
    #[serde(skip)]
    pub(super) unprotected: f64,
    /// Standard error of `transfer`.
    pub error: f64,
    /// Squared coherence of both, 0 to 1.
    pub coherence: f64,
    /// BEFORE's mean power, arbitrary unit.
    pub before_power: f64,
    /// AFTER's mean power, the same unit.
    pub after_power: f64,
    /// Whether BEFORE has enough power here to be judged.
    pub judged: bool,
}

/// The transfer over frequency.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Curve {
    /// Rings, from low to high frequency.
    pub rings: Vec<Ring>,
    /// The coarser grid's Nyquist frequency, cycles per input pixel.
    pub nyquist: f64,
}

/// What a curve comes down to.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Sharpness {
    /// Factor at frequency 0 that the transfer is divided by.
    pub gain: f64,
    /// Transfer at 0.10, 0.25 and 0.40 cycles per input pixel; 0 above the coarser grid's Nyquist frequency, null where
    /// BEFORE has too little detail to tell.
    pub transfer: [Option<f64>; 3],
    /// Cycles per input pixel where the transfer first falls to 1/2; the Nyquist frequency of the coarser grid where it does
    /// not.
    pub mtf50: f64,
    /// Highest frequency that could be judged; 0 if none could.
    pub judged_up_to: f64,
    /// Standard deviation (input pixels) of the Gaussian that loses as much.
    pub gaussian_sigma: f64,
    /// Root mean square distance of the transfer from that Gaussian's.
    pub gaussian_misfit: f64,
    /// Whether the blur is well described by it: a sigma above 0.3 pixels and a misfit under 0.03.
    pub is_gaussian: bool,
    /// Difference of the transfer along rows and along columns, root mean square over the frequencies that could be judged,
    /// without what chance makes.
    pub axes_differ_by: f64,
}

impl Curve {
    /// The ring nearest to a frequency.
    pub(super) fn nearest(&self, f: f64) -> Option<&Ring> {
        self.rings.iter().min_by(|a, b| (a.frequency - f).abs().total_cmp(&(b.frequency - f).abs()))
    }

    fn judged(&self) -> impl Iterator<Item = &Ring> {
        self.rings.iter().filter(|r| r.judged)
    }

    /// The transfer at a frequency, between judged rings; at most a ring's breadth and a half beyond them.
    fn at(&self, f: f64, gain: f64) -> Option<f64> {
        if f > self.nyquist + 1e-9 {
            return Some(0.0);
        }
        let below = self.judged().filter(|r| r.frequency <= f).last();
        let above = self.judged().find(|r| r.frequency > f);
        let near = |r: &Ring| (r.frequency - f).abs() < 0.03;
        match (below, above) {
            (Some(a), Some(b)) if b.frequency - a.frequency < 0.06 => {
                let t = (f - a.frequency) / (b.frequency - a.frequency);
                Some((a.transfer + t * (b.transfer - a.transfer)) / gain)
            }
            // Below the first ring the transfer comes from 1.
            (None, Some(b)) => Some(1.0 + (b.transfer / gain - 1.0) * (f / b.frequency).powi(2)),
            (Some(r), _) | (_, Some(r)) if near(r) => Some(r.transfer / gain),
            _ => None,
        }
    }

    /// Sums the curve up; `None` where nothing could be judged.
    pub fn sharpness(&self) -> Option<Sharpness> {
        let judged_up_to = self.judged().last()?.frequency;
        let gain = self.gain(judged_up_to)?;
        let (sigma, misfit) = self.gaussian(gain);
        let is_gaussian = sigma > 0.3 && misfit < 0.03;
        let mut last = (0.0, 1.0);
        let mut crossing = None;
        for r in self.judged() {
            let here = (r.frequency, r.transfer / gain);
            if here.1 < 0.5 {
                let t = (last.1 - 0.5) / (last.1 - here.1);
                crossing = Some(last.0 + t * (here.0 - last.0));
                break;
            }
            last = here;
        }
        // Beyond what could be judged a Gaussian goes on as one.
        let beyond = (is_gaussian && crossing.is_none()).then(|| (2f64.ln() / 2.0).sqrt() / (PI * sigma));
        // Along each axis a sixth of the ring tells: twice six times its variance is what chance makes.
        let differences: Vec<f64> = self
            .judged()
            .filter_map(|r| Some(((r.rows? - r.columns?).powi(2) - 12.0 * r.error * r.error) / (gain * gain)))
            .collect();
        let axes_differ_by =
            (differences.iter().sum::<f64>() / differences.len().max(1) as f64).max(0.0).sqrt();
        Some(Sharpness {
            gain,
            transfer: [0.10, 0.25, 0.40].map(|f| self.at(f, gain).map(|t| t.max(0.0))),
            mtf50: crossing.or(beyond).unwrap_or(self.nyquist).min(self.nyquist),
            judged_up_to,
            gaussian_sigma: sigma,
            gaussian_misfit: misfit,
            is_gaussian,
            axes_differ_by,
        })
    }

    /// The transfer at frequency 0, from ln H = ln g - q f^2 over the lowest judged rings.
    fn gain(&self, judged_up_to: f64) -> Option<f64> {
        let low: Vec<&Ring> = self
            .judged()
            .enumerate()
            .filter(|(i, r)| r.transfer > 0.0 && (*i < 3 || r.frequency < 0.35 * judged_up_to))
            .map(|(_, r)| r)
            .collect();
        let points = low.iter().map(|r| (r.frequency * r.frequency, r.transfer.ln(), weight(r)));
        match line(points) {
            // A transfer that rises from 0 (sharpening) is divided by what it is at the lowest rings.
            Some((at_zero, slope)) if slope <= 0.0 => Some(at_zero.exp()),
            _ => low.first().map(|r| r.transfer),
        }
        .filter(|g| g.is_finite() && *g > 0.0)
    }

    /// The Gaussian nearest to the transfer, and how far it is from it.
    fn gaussian(&self, gain: f64) -> (f64, f64) {
        let used: Vec<&Ring> = self.judged().filter(|r| r.frequency < 0.9 * self.nyquist).collect();
        let strong = used.iter().filter(|r| r.transfer / gain > 0.08);
        let points = strong.map(|r| (r.frequency * r.frequency, (r.transfer / gain).ln(), weight(r)));
        // Through 1 at frequency 0.
        let (mut xx, mut xy) = (0.0, 0.0);
        for (x, y, w) in points {
            xx += w * x * x;
            xy += w * x * y;
        }
        let q = if xx > 0.0 { (-xy / xx).max(0.0) } else { 0.0 };
        let squares: f64 =
            used.iter().map(|r| (r.transfer / gain - (-q * r.frequency * r.frequency).exp()).powi(2)).sum();
        ((q / 2.0).sqrt() / PI, (squares / used.len().max(1) as f64).sqrt())
    }
}

/// Weight of a ring's logarithm: its value over its error, with a floor of half a per cent.
fn weight(r: &Ring) -> f64 {
    (r.transfer / r.error.max(0.005)).powi(2)
}

/// The weighted straight line through points (x, y, weight): value at 0 and slope.
fn line(points: impl Iterator<Item = (f64, f64, f64)>) -> Option<(f64, f64)> {
    let (mut n, mut sx, mut sy, mut sxx, mut sxy) = (0.0, 0.0, 0.0, 0.0, 0.0);
    for (x, y, w) in points {
        n += w;
        sx += w * x;
        sy += w * y;
        sxx += w * x * x;
        sxy += w * x * y;
    }
    let d = n * sxx - sx * sx;
    (d > 1e-9 * n * sxx).then(|| ((sxx * sy - sx * sxy) / d, (n * sxy - sx * sy) / d))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn curve(nyquist: f64, upto: f64, transfer: impl Fn(f64) -> f64) -> Curve {
        let rings = (2..40)
            .map(|i| f64::from(i) * 0.0125)
            .filter(|f| *f < 0.96 * nyquist)
            .map(|f| Ring {
                frequency: f,
                transfer: transfer(f),
                unprotected: 1.0,
                rows: Some(transfer(f)),
                columns: Some(transfer(f) - 0.05),
                error: 1e-3,
                coherence: 1.0,
                before_power: 1.0,
                after_power: 1.0,
                judged: f < upto,
            })
            .collect();
        Curve { rings, nyquist }
    }

    #[test]
    fn a_gaussian_blur_is_told_by_its_sigma_whatever_the_contrast() {
        let gauss = |s: f64| move |f: f64| 0.8 * (-2.0 * (PI * s * f).powi(2)).exp();
        for (sigma, upto) in [(1.5, 0.5), (1.5, 0.16), (0.6, 0.2)] {
            let Some(s) = curve(0.5, upto, gauss(sigma)).sharpness() else { panic!("judged") };
            assert!(
                (s.gaussian_sigma / sigma - 1.0).abs() < 1e-3 && s.is_gaussian && (s.gain - 0.8).abs() < 1e-3,
                "{s:?}"
            );
            // exp(-2 (pi sigma f)^2) = 1/2.
            assert!((s.mtf50 - (2f64.ln() / 2.0).sqrt() / (PI * sigma)).abs() < 2e-3, "{s:?}");
            let at = s.transfer[0].unwrap_or(f64::NAN);
            assert!((at - (-2.0 * (PI * sigma * 0.1).powi(2)).exp()).abs() < 2e-3, "{at}");
            assert_eq!(s.transfer[2].is_none(), upto < 0.3);
        }
    }

    #[test]
    fn a_sharp_curve_ends_at_the_coarser_nyquist() {
        let Some(s) = curve(0.25, 1.0, |f| (PI * f).cos()).sharpness() else { panic!("judged") };
        assert_eq!(s.mtf50, 0.25);
        assert_eq!(s.transfer[2], Some(0.0));
        assert!((s.transfer[0].unwrap_or(0.0) - (0.1 * PI).cos()).abs() < 5e-3);
        assert!((s.axes_differ_by - 0.05).abs() < 5e-3);
        assert!(curve(0.5, 0.0, |_| 1.0).sharpness().is_none());
    }
}
