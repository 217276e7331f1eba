//! Round numbers: ticks of a colour bar, lengths of a scale bar, and how they are written.

/// The largest of 1, 2 or 5 times a power of ten that is not above `value`; 1 if `value` is not above 0 or not finite.
pub fn round_down(value: f64) -> f64 {
    if !(value.is_finite() && value > 0.0) {
        return 1.0;
    }
    let power = 10f64.powi(value.log10().floor() as i32);
    // A little slack, so that 0.5 / 0.1 is 5 whatever the last bit says.
    let lead = value / power * (1.0 + 1e-9);
    power
        * if lead >= 10.0 {
            10.0
        } else if lead >= 5.0 {
            5.0
        } else if lead >= 2.0 {
            2.0
        } else {
            1.0
        }
}

/// The smallest of 1, 2 or 5 times a power of ten that is not below `value`.
pub fn round_up(value: f64) -> f64 {
    let below = round_down(value);
    if below >= value * (1.0 - 1e-9) {
        return below;
    }
    let lead = below / 10f64.powi(below.log10().floor() as i32);
    if (1.5..=4.0).contains(&lead) { below * 2.5 } else { below * 2.0 }
}

/// Round numbers from `low` to `high`, about `count` of them, and the number of decimals that tells them apart.
pub fn ticks(low: f64, high: f64, count: usize) -> (Vec<f64>, usize) {
    let step = round_up((high - low) / count.max(1) as f64);
    let first = (low / step - 1e-6).ceil();
    let last = (high / step + 1e-6).floor();
    let decimals = (-step.log10() - 1e-9).ceil().clamp(0.0, 12.0) as usize;
    // Far from 0 a step can drown in rounding; then there are no ticks rather than endless ones.
    let steps = last - first;
    if !(0.0..=200.0).contains(&steps) {
        return (Vec::new(), decimals);
    }
    ((0..=steps as usize).map(|i| (first + i as f64) * step).collect(), decimals)
}

/// A number with a true minus sign; zero has no sign. Very large and very small ones take powers of ten.
pub fn written(value: f64, decimals: usize) -> String {
    let size = value.abs();
    if size >= 1e7 || (size > 0.0 && decimals > 6) {
        return format!("{value:.2e}").replace('-', "−");
    }
    let text = format!("{size:.decimals$}");
    let zero = !text.bytes().any(|b| b.is_ascii_digit() && b != b'0');
    if value < 0.0 && !zero { format!("−{text}") } else { text }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn round_numbers() {
        for (value, down, up) in [
            (0.3, 0.2, 0.5),
            (1.0, 1.0, 1.0),
            (4.99, 2.0, 5.0),
            (70.0, 50.0, 100.0),
            (0.002, 0.002, 0.002),
            (1999.0, 1000.0, 2000.0),
            (0.5, 0.5, 0.5),
        ] {
            assert!((round_down(value) / down - 1.0).abs() < 1e-9, "{value}: {}", round_down(value));
            assert!((round_up(value) / up - 1.0).abs() < 1e-9, "{value}: {}", round_up(value));
        }
        assert_eq!((round_down(f64::NAN), round_down(-3.0)), (1.0, 1.0));
    }

    #[test]
    fn ticks_are_round_and_inside() {
        let (at, decimals) = ticks(-0.4, 0.4, 8);
        let text: Vec<String> = at.iter().map(|v| written(*v, decimals)).collect();
        assert_eq!(text, ["−0.4", "−0.3", "−0.2", "−0.1", "0.0", "0.1", "0.2", "0.3", "0.4"]);
        let (at, decimals) = ticks(11.73, 16.02, 5);
        assert_eq!((at, decimals), (vec![12.0, 13.0, 14.0, 15.0, 16.0], 0));
        let (at, decimals) = ticks(-0.037, 0.041, 5);
        let text: Vec<String> = at.iter().map(|v| written(*v, decimals)).collect();
        assert_eq!(text, ["−0.02", "0.00", "0.02", "0.04"]);
        assert!(ticks(1e17, 1e17 + 1e-3, 5).0.len() <= 201);
    }

    #[test]
    fn numbers_are_written_as_printed() {
        assert_eq!(written(-0.0001, 2), "0.00");
        assert_eq!(written(-12.5, 1), "−12.5");
        assert_eq!(written(3.2e9, 0), "3.20e9");
        assert_eq!(written(2e-9, 9), "2.00e−9");
    }
}
