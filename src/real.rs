//! The two working precisions.

/// f32 or f64: what a pass computes in. Weights are built in f64 and cast once.
pub trait Real:
    Copy
    + Send
    + Sync
    + Default
    + PartialOrd
    + std::fmt::Debug
    + std::ops::Add<Output = Self>
    + std::ops::Sub<Output = Self>
    + std::ops::Mul<Output = Self>
    + std::ops::Div<Output = Self>
    + std::ops::Neg<Output = Self>
    + 'static
{
    /// 1.
    const ONE: Self;
    /// How far from 1 the response to a line of ones may be by rounding alone.
    const UNITY_SLACK: f64;
    /// Rounded to this precision.
    fn from_f64(v: f64) -> Self;
    /// Widened to f64.
    fn to_f64(self) -> f64;
    /// Without sign.
    fn magnitude(self) -> Self;
}

impl Real for f32 {
    const ONE: Self = 1.0;
    const UNITY_SLACK: f64 = 1e-6;
    #[inline(always)]
    fn from_f64(v: f64) -> Self {
        v as f32
    }
    #[inline(always)]
    fn to_f64(self) -> f64 {
        f64::from(self)
    }
    #[inline(always)]
    fn magnitude(self) -> Self {
        self.abs()
    }
}

impl Real for f64 {
    const ONE: Self = 1.0;
    const UNITY_SLACK: f64 = 1e-12;
    #[inline(always)]
    fn from_f64(v: f64) -> Self {
        v
    }
    #[inline(always)]
    fn to_f64(self) -> f64 {
        self
    }
    #[inline(always)]
    fn magnitude(self) -> Self {
        self.abs()
    }
}
