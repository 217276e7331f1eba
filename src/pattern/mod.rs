//! Test patterns with their closed forms, and the invented survey of the demo.

pub mod peatland;

/// A whole number from whole numbers, spread evenly over all 64 bits: the finaliser of SplitMix64 (Steele, Lea and
/// Flood, "Fast splittable pseudorandom number generators", OOPSLA 2014), fed with a stream and a counter. No state:
/// the same arguments give the same number in any order and on any thread.
pub fn hash(stream: u64, counter: u64) -> u64 {
    let mut z = mix(stream).wrapping_add(counter.wrapping_add(1).wrapping_mul(0x9e37_79b9_7f4a_7c15));
    z = mix(z);
    z
}

fn mix(z: u64) -> u64 {
    let z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    let z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    z ^ (z >> 31)
}

/// An even deviate in 0 to 1, never 0 or 1 itself.
pub fn uniform(stream: u64, counter: u64) -> f64 {
    ((hash(stream, counter) >> 12) as f64 + 0.5) / (1u64 << 52) as f64
}

/// A standard normal deviate by the method of Box and Muller (1958).
pub fn normal(stream: u64, counter: u64) -> f64 {
    let (u, v) = (uniform(stream, 2 * counter), uniform(stream, 2 * counter + 1));
    (-2.0 * u.ln()).sqrt() * (std::f64::consts::TAU * v).cos()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn deviates_have_the_moments_they_should() {
        let n = 40_000u64;
        let draw: Vec<f64> = (0..n).map(|i| normal(7, i)).collect();
        let moment = |power: i32| draw.iter().map(|v| v.powi(power)).sum::<f64>() / n as f64;
        // Standard errors: 1, sqrt 2, sqrt 15, sqrt 96 over sqrt n; four of them.
        for (power, value, error) in [(1, 0.0, 1.0), (2, 1.0, 1.42), (3, 0.0, 3.88), (4, 3.0, 9.8)] {
            assert!(
                (moment(power) - value).abs() < 4.0 * error / (n as f64).sqrt(),
                "{power}: {}",
                moment(power)
            );
        }
        // Neighbours and other streams know nothing of each other.
        let lag: f64 = draw.windows(2).map(|p| p[0] * p[1]).sum::<f64>() / n as f64;
        let other: f64 = (0..n).map(|i| draw[i as usize] * normal(8, i)).sum::<f64>() / n as f64;
        assert!(lag.abs() < 0.02 && other.abs() < 0.02, "{lag} {other}");
    }

    #[test]
    fn even_deviates_fill_their_range() {
        let mut bins = [0u32; 10];
        for i in 0..10_000 {
            bins[(uniform(3, i) * 10.0) as usize] += 1;
        }
        assert!(bins.iter().all(|b| (880..=1120).contains(b)), "{bins:?}");
    }
}
