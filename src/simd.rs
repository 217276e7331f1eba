//! Runs hot loops with the widest vectors that the processor has.
//!
//! The loops themselves are plain Rust: sums and products in a fixed order, never fused, vectorised across outputs and
//! never across taps. So every level gives the same bits; only the speed differs.

#![allow(unsafe_code)]

use std::sync::atomic::{AtomicBool, Ordering};

static NARROW: AtomicBool = AtomicBool::new(false);

/// Keeps to the instructions that every processor of the family has. For tests and for timing; the bits are the same.
pub fn force_narrow(narrow: bool) {
    NARROW.store(narrow, Ordering::Relaxed);
}

/// Calls `body`, compiled for AVX2 where the processor has it. Mark what `body` calls `#[inline(always)]`.
#[inline]
pub(crate) fn wide<R>(body: impl FnOnce() -> R) -> R {
    #[cfg(target_arch = "x86_64")]
    {
        #[target_feature(enable = "avx2")]
        fn with_avx2<R>(body: impl FnOnce() -> R) -> R {
            body()
        }
        if !NARROW.load(Ordering::Relaxed) && is_x86_feature_detected!("avx2") {
            // SAFETY: the processor was just asked whether it has AVX2. Measured to pay: the vectors are twice as wide as
            // the baseline's, see benches/.
            return unsafe { with_avx2(body) };
        }
    }
    body()
}
