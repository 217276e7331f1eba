//! What every stored sample can do, whatever its type.

use crate::real::Real;

/// A stored sample.
pub trait Sample: Copy + Send + Sync + 'static {
    /// Whether the type has NaN.
    const CAN_BE_NAN: bool;
    /// Its value.
    fn wide(self) -> f64;
    /// A code in this type: the nearest number in floating point (text such as -3.4028235e38 names one), `None` if an
    /// integer type cannot hold it.
    fn code(v: f64) -> Option<Self>;
    /// Cast, saturating.
    fn of(v: f64) -> Self;
    /// Whether it equals a code.
    fn is(self, code: Self) -> bool;
    /// Whether it is no number.
    fn is_nan(self) -> bool;

    /// Its value in working precision.
    #[inline(always)]
    fn to_real<T: Real>(self) -> T {
        T::from_f64(self.wide())
    }
}

macro_rules! integer {
    ($($t:ty),*) => {$(
        impl Sample for $t {
            const CAN_BE_NAN: bool = false;
            #[inline(always)]
            fn wide(self) -> f64 { f64::from(self) }
            fn code(v: f64) -> Option<Self> { (f64::from(v as $t) == v).then_some(v as $t) }
            fn of(v: f64) -> Self { v as $t }
            #[inline(always)]
            fn is(self, code: Self) -> bool { self == code }
            #[inline(always)]
            fn is_nan(self) -> bool { false }
        }
    )*};
}
integer!(u8, i8, u16, i16, u32, i32);

macro_rules! floating {
    ($($t:ty),*) => {$(
        impl Sample for $t {
            const CAN_BE_NAN: bool = true;
            #[inline(always)]
            fn wide(self) -> f64 { f64::from(self) }
            fn code(v: f64) -> Option<Self> { Some(v as $t) }
            fn of(v: f64) -> Self { v as $t }
            #[inline(always)]
            fn is(self, code: Self) -> bool { self == code }
            #[inline(always)]
            fn is_nan(self) -> bool { <$t>::is_nan(self) }
        }
    )*};
}
floating!(f32, f64);

/// Which stored numbers mean "no data", beside NaN.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct MissingCodes {
    /// The codes, as the user or the file gave them.
    pub codes: Vec<f64>,
}

impl MissingCodes {
    /// The codes that a type can hold, in that type.
    pub fn of<S: Sample>(&self) -> Vec<S> {
        self.codes.iter().filter_map(|c| S::code(*c)).collect()
    }
}
