//! From working precision to stored samples: rounding half to even, saturation, the code for missing, all counted.

use crate::raster::{SampleType, Samples};
use crate::real::Real;
use ndarray::ArrayView2;
use rayon::prelude::*;

/// What happened to samples on their way into the output's type.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Counts {
    /// Missing.
    pub missing: u64,
    /// Below the type's range, set to its least value.
    pub clipped_low: u64,
    /// Above the type's range, set to its greatest value.
    pub clipped_high: u64,
    /// Equal to the code for missing, moved off by one.
    pub moved_off_code: u64,
    /// Sum of stored minus computed.
    pub rounding: f64,
}

impl Counts {
    /// Adds another part's counts.
    pub fn add(&mut self, other: &Counts) {
        self.missing += other.missing;
        self.clipped_low += other.clipped_low;
        self.clipped_high += other.clipped_high;
        self.moved_off_code += other.moved_off_code;
        self.rounding += other.rounding;
    }
}

/// Converts a plane (NaN = missing) to `to`, writing `code` for missing samples (NaN in floating point if `None`).
pub fn convert<T: Real>(plane: ArrayView2<T>, to: SampleType, code: Option<f64>) -> (Samples, Counts) {
    macro_rules! integers {
        ($t:ty) => {
            run(plane, code, |v, code, counts| {
                integer(v, code, counts, <$t>::MIN as f64, <$t>::MAX as f64) as $t
            })
        };
    }
    match to {
        SampleType::U8 => integers!(u8),
        SampleType::I8 => integers!(i8),
        SampleType::U16 => integers!(u16),
        SampleType::I16 => integers!(i16),
        SampleType::U32 => integers!(u32),
        SampleType::I32 => integers!(i32),
        SampleType::F32 => run(plane, code.map(|c| f64::from(c as f32)), |v, code, counts| {
            let Some(v) = v else { return code.unwrap_or(f64::NAN) as f32 };
            let stored = v as f32;
            if Some(f64::from(stored)) == code {
                counts.moved_off_code += 1;
                return stored.next_up();
            }
            stored
        }),
        SampleType::F64 => run(plane, code, |v, code, counts| {
            let Some(v) = v else { return code.unwrap_or(f64::NAN) };
            if Some(v) == code {
                counts.moved_off_code += 1;
                return v.next_up();
            }
            v
        }),
    }
}

/// Rounds half to even and saturates.
fn integer(v: Option<f64>, code: Option<f64>, counts: &mut Counts, least: f64, most: f64) -> f64 {
    let Some(v) = v else {
        // Without a code no missing sample reaches an integer output: the job refuses before it begins.
        return code.unwrap_or(0.0);
    };
    let mut stored = v.round_ties_even();
    if stored < least {
        counts.clipped_low += 1;
        stored = least;
    } else if stored > most {
        counts.clipped_high += 1;
        stored = most;
    }
    if Some(stored) == code {
        counts.moved_off_code += 1;
        // Towards the computed value where there is a choice.
        stored = if (v > stored || stored == least) && stored < most { stored + 1.0 } else { stored - 1.0 };
    }
    counts.rounding += stored - v;
    stored
}

fn run<T: Real, S: Copy + Default + Send>(
    plane: ArrayView2<T>,
    code: Option<f64>,
    store: impl Fn(Option<f64>, Option<f64>, &mut Counts) -> S + Sync,
) -> (Samples, Counts)
where
    Samples: From<Vec<S>>,
{
    let (rows, columns) = plane.dim();
    let mut out = vec![S::default(); rows * columns];
    let counts: Vec<Counts> = out
        .par_chunks_mut(columns.max(1))
        .zip(0..rows)
        .map(|(line, r)| {
            let mut counts = Counts::default();
            for (d, v) in line.iter_mut().zip(plane.row(r)) {
                let v = v.to_f64();
                let v = if v.is_nan() { None } else { Some(v) };
                counts.missing += u64::from(v.is_none());
                *d = store(v, code, &mut counts);
            }
            counts
        })
        .collect();
    // Row by row, in order: the same sum for any number of threads.
    let total = counts.iter().fold(Counts::default(), |mut all, c| {
        all.add(c);
        all
    });
    (Samples::from(out), total)
}
