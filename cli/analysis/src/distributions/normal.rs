//! The standard normal distribution.
//!
//! Invariant: each tail is an error function of its own argument, and the quantile works from the smaller tail.

use std::f64::consts::{PI, SQRT_2};

use super::{held, probability};

/// The standard normal distribution.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Normal;

impl Normal {
    /// P(Z ≤ z) = ½ erfc(−z/√2) (Abramowitz & Stegun 1964, 26.2.29); `None` for NaN.
    #[must_use]
    pub fn cdf(self, z: f64) -> Option<f64> {
        self.sf(-z)
    }

    /// P(Z > z); `None` for NaN.
    #[must_use]
    pub fn sf(self, z: f64) -> Option<f64> {
        (!z.is_nan()).then(|| libm::erfc(z / SQRT_2) / 2.0)
    }

    /// The z with P(Z ≤ z) = `p`; `None` unless 0 < p < 1.
    ///
    /// Wichura 1988, algorithm AS 241, *Applied Statistics* 37:477; relative error about 1e-16.
    #[must_use]
    pub fn quantile(self, p: f64) -> Option<f64> {
        let p = probability(p)?;
        let from_middle = p - 0.5;
        if from_middle.abs() <= 0.425 {
            return Some(from_middle * CENTRE.at(0.180_625 - from_middle * from_middle));
        }
        let size = held(far((-p.min(1.0 - p).ln()).sqrt()))?;
        Some(size.copysign(from_middle))
    }

    /// The z with P(Z > z) = `q`; `None` unless 0 < q < 1.
    #[must_use]
    pub fn upper_quantile(self, q: f64) -> Option<f64> {
        self.quantile(q).map(|z| 0.0 - z)
    }
}

/// Φ(z).
pub(super) fn phi(z: f64) -> f64 {
    libm::erfc(-z / SQRT_2) / 2.0
}

/// φ(z).
pub(super) fn density(z: f64) -> f64 {
    (-0.5 * z * z).exp() / (2.0 * PI).sqrt()
}

/// ln Φ(z), also where Φ(z) is too small for a double: from −30 down by the asymptotic series (Abramowitz & Stegun 1964,
/// 26.2.12), whose first term left out is below 1e-16.
pub(super) fn log_cdf(z: f64) -> f64 {
    if z > -30.0 {
        return phi(z).ln();
    }
    let ratio = 1.0 / (z * z);
    let series = (1..8).rev().fold(1.0, |rest, n| 1.0 - f64::from(2 * n - 1) * ratio * rest);
    -0.5 * z * z - (-z).ln() - 0.5 * (2.0 * PI).ln() + series.ln()
}

/// The size of the quantile whose tail is exp(−r²).
fn far(r: f64) -> f64 {
    if r <= 5.0 { TAIL.at(r - 1.6) } else { FAR_TAIL.at(r - 5.0) }
}

/// A quotient of two polynomials, coefficients from the constant up.
struct Quotient {
    over: [f64; 8],
    under: [f64; 8],
}

impl Quotient {
    fn at(&self, x: f64) -> f64 {
        let horner = |c: &[f64; 8]| c.iter().rev().fold(0.0, |sum, &next| sum * x + next);
        horner(&self.over) / horner(&self.under)
    }
}

const CENTRE: Quotient = Quotient {
    over: [
        3.387_132_872_796_366_5,
        133.141_667_891_784_38,
        1_971.590_950_306_551_3,
        13_731.693_765_509_46,
        45_921.953_931_549_87,
        67_265.770_927_008_7,
        33_430.575_583_588_13,
        2_509.080_928_730_122_7,
    ],
    under: [
        1.0,
        42.313_330_701_600_91,
        687.187_007_492_057_9,
        5_394.196_021_424_751,
        21_213.794_301_586_597,
        39_307.895_800_092_71,
        28_729.085_735_721_943,
        5_226.495_278_852_854,
    ],
};

const TAIL: Quotient = Quotient {
    over: [
        1.423_437_110_749_683_5,
        4.630_337_846_156_546,
        5.769_497_221_460_691,
        3.647_848_324_763_204_5,
        1.270_458_252_452_368_4,
        0.241_780_725_177_450_6,
        0.022_723_844_989_269_184,
        7.745_450_142_783_414e-4,
    ],
    under: [
        1.0,
        2.053_191_626_637_759,
        1.676_384_830_183_803_8,
        0.689_767_334_985_1,
        0.148_103_976_427_480_08,
        0.015_198_666_563_616_457,
        5.475_938_084_995_345e-4,
        1.050_750_071_644_416_9e-9,
    ],
};

const FAR_TAIL: Quotient = Quotient {
    over: [
        6.657_904_643_501_103,
        5.463_784_911_164_114,
        1.784_826_539_917_291_3,
        0.296_560_571_828_504_87,
        0.026_532_189_526_576_124,
        1.242_660_947_388_078_4e-3,
        2.711_555_568_743_487_6e-5,
        2.010_334_399_292_288_1e-7,
    ],
    under: [
        1.0,
        0.599_832_206_555_888,
        0.136_929_880_922_735_8,
        0.014_875_361_290_850_615,
        7.868_691_311_456_133e-4,
        1.846_318_317_510_054_8e-5,
        1.421_511_758_316_446e-7,
        2.044_263_103_389_939_8e-15,
    ],
};
