//! Real and complex numbers behind one trait, so that each kernel is written once.

use num_complex::Complex64;
use rand::Rng;

/// A matrix element: `f64` or `Complex64`.
pub trait Scalar:
    ndarray::LinalgScalar
    + ndarray::ScalarOperand
    + std::ops::AddAssign
    + std::ops::SubAssign
    + std::ops::MulAssign
    + std::ops::Neg<Output = Self>
    + std::ops::Mul<f64, Output = Self>
    + std::iter::Sum
    + std::fmt::Debug
    + std::fmt::Display
    + PartialEq
    + Default
    + Send
    + Sync
{
    /// Whether imaginary parts exist.
    const IS_COMPLEX: bool;

    /// The real number `value`.
    fn from_real(value: f64) -> Self;
    /// Complex numbers into this type, if nothing is lost.
    fn from_complex(value: Complex64) -> Option<Self>;
    /// The same number as a complex one.
    fn to_complex(self) -> Complex64;
    /// Real part.
    fn re(self) -> f64;
    /// Imaginary part.
    fn im(self) -> f64;
    /// Complex conjugate.
    fn conj(self) -> Self;
    /// Square of the absolute value.
    fn abs_sqr(self) -> f64;
    /// Absolute value.
    fn abs(self) -> f64;
    /// The numbers themselves, if this type is real: a way to instructions for real numbers.
    fn as_reals(numbers: &[Self]) -> Option<&[f64]>;
    /// The same for numbers to be written.
    fn as_reals_mut(numbers: &mut [Self]) -> Option<&mut [f64]>;
    /// self + a b, rounded once for each real product. Only for code that is compiled for the
    /// processor found at run time: elsewhere it is a slow call.
    fn plus_product(self, a: Self, b: Self) -> Self;
    /// A standard normal random number (independent real and imaginary parts).
    fn random_normal<R: Rng>(generator: &mut R) -> Self;

    /// Neither infinite nor NaN.
    fn is_finite(self) -> bool {
        self.re().is_finite() && self.im().is_finite()
    }
}

/// A pair of independent standard normal numbers (Box and Muller's transformation).
fn normal_pair<R: Rng>(generator: &mut R) -> (f64, f64) {
    // 1 - u lies in (0, 1], so the logarithm is finite
    let radius = (-2.0 * (1.0 - generator.random::<f64>()).ln()).sqrt();
    let angle = 2.0 * std::f64::consts::PI * generator.random::<f64>();
    (radius * angle.cos(), radius * angle.sin())
}

impl Scalar for f64 {
    const IS_COMPLEX: bool = false;

    fn from_real(value: f64) -> Self {
        value
    }
    fn from_complex(value: Complex64) -> Option<Self> {
        (value.im == 0.0).then_some(value.re)
    }
    fn to_complex(self) -> Complex64 {
        Complex64::new(self, 0.0)
    }
    fn as_reals(numbers: &[Self]) -> Option<&[f64]> {
        Some(numbers)
    }
    fn as_reals_mut(numbers: &mut [Self]) -> Option<&mut [f64]> {
        Some(numbers)
    }
    #[inline(always)]
    fn plus_product(self, a: Self, b: Self) -> Self {
        a.mul_add(b, self)
    }
    fn re(self) -> f64 {
        self
    }
    fn im(self) -> f64 {
        0.0
    }
    fn conj(self) -> Self {
        self
    }
    fn abs_sqr(self) -> f64 {
        self * self
    }
    fn abs(self) -> f64 {
        f64::abs(self)
    }
    fn random_normal<R: Rng>(generator: &mut R) -> Self {
        normal_pair(generator).0
    }
}

impl Scalar for Complex64 {
    const IS_COMPLEX: bool = true;

    fn from_real(value: f64) -> Self {
        Complex64::new(value, 0.0)
    }
    fn from_complex(value: Complex64) -> Option<Self> {
        Some(value)
    }
    fn to_complex(self) -> Complex64 {
        self
    }
    fn as_reals(_: &[Self]) -> Option<&[f64]> {
        None
    }
    fn as_reals_mut(_: &mut [Self]) -> Option<&mut [f64]> {
        None
    }
    #[inline(always)]
    fn plus_product(self, a: Self, b: Self) -> Self {
        let re = (-a.im).mul_add(b.im, a.re.mul_add(b.re, self.re));
        let im = a.im.mul_add(b.re, a.re.mul_add(b.im, self.im));
        Complex64::new(re, im)
    }
    fn re(self) -> f64 {
        self.re
    }
    fn im(self) -> f64 {
        self.im
    }
    fn conj(self) -> Self {
        Complex64::conj(&self)
    }
    fn abs_sqr(self) -> f64 {
        self.norm_sqr()
    }
    fn abs(self) -> f64 {
        self.norm()
    }
    fn random_normal<R: Rng>(generator: &mut R) -> Self {
        let (re, im) = normal_pair(generator);
        Complex64::new(re, im)
    }
}
