//! The distribution of the studentized range.
//!
//! Invariant: the mass above is the mean of what exceeds, and the mass below the mean of what does not; neither is one
//! minus the other where that would cost digits.

use super::mixture::over_scale;
use super::normal::{density, phi};
use super::{ParameterError, StudentT, Tails, degrees, probability, quantile};

/// The distribution of the range of k independent standard normal numbers over √(χ²_ν / ν), ν = `df` degrees of freedom,
/// which need not be whole: that of the largest difference among k means in units of one mean's standard error.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct StudentizedRange {
    means: usize,
    df: f64,
}

/// The most means accepted.
const MOST_MEANS: usize = 1000;
/// Beyond this a range of up to that many standard normal numbers has no mass that a double holds.
const FARTHEST: f64 = 60.0;

impl StudentizedRange {
    /// # Errors
    /// [`ParameterError`] unless there are 2 to 1000 means, and `df` lies between [`FEWEST`](super::FEWEST) and
    /// [`MOST`](super::MOST).
    pub fn new(means: usize, df: f64) -> Result<Self, ParameterError> {
        let df = degrees(df)?;
        if (2..=MOST_MEANS).contains(&means) { Ok(Self { means, df }) } else { Err(ParameterError::Means(means)) }
    }

    /// P(Q ≤ q) = E P(R ≤ q s), R the range of k normal numbers (Copenhaver & Holland 1988, *Journal of Statistical
    /// Computation and Simulation* 30:1, equations 1.1 and 1.2, by trapezoidal sums instead of Gaussian ones); `None`
    /// for NaN.
    #[must_use]
    pub fn cdf(self, q: f64) -> Option<f64> {
        if self.means == 2 || !within_reach(q) {
            return Some(self.tails(q, true)?.lower);
        }
        self.below(q)
    }

    /// P(Q > q), the adjusted p value of a pair of k means that differ by q standard errors of one mean; `None` for NaN.
    #[must_use]
    pub fn sf(self, q: f64) -> Option<f64> {
        if self.means == 2 || !within_reach(q) {
            return Some(self.tails(q, false)?.upper);
        }
        self.above(q)
    }

    /// The q with P(Q ≤ q) = `p`; `None` unless 0 ≤ p < 1.
    #[must_use]
    pub fn quantile(self, p: f64) -> Option<f64> {
        let p = probability(p)?;
        self.matching(p, 1.0 - p)
    }

    /// The q with P(Q > q) = `upper`; `None` unless 0 < upper ≤ 1.
    #[must_use]
    pub fn upper_quantile(self, upper: f64) -> Option<f64> {
        let upper = probability(upper)?;
        self.matching(1.0 - upper, upper)
    }

    fn matching(self, lower: f64, upper: f64) -> Option<f64> {
        // Each tail is an integral of its own, and only the smaller one is looked at.
        quantile::positive(lower, upper, 3.0, |q| self.tails(q, lower <= upper))
    }

    /// Both tails, of which the one asked for is computed as itself.
    fn tails(self, q: f64, from_below: bool) -> Option<Tails> {
        if q.is_nan() {
            return None;
        }
        if self.means == 2 {
            // The range of two numbers is √2 times the size of a normal one.
            return StudentT::new(self.df).ok()?.around_zero(q.max(0.0) / std::f64::consts::SQRT_2);
        }
        if !within_reach(q) {
            let above = q > 0.0;
            return Some(Tails { lower: f64::from(above), upper: f64::from(!above), slope: 0.0 });
        }
        let slope = self.mean(0.0, |w| self.normal(w).slope(), q)?;
        if from_below {
            let lower = self.below(q)?;
            return Some(Tails { lower, upper: 1.0 - lower, slope });
        }
        let upper = self.above(q)?;
        Some(Tails { lower: 1.0 - upper, upper, slope })
    }

    fn below(self, q: f64) -> Option<f64> {
        self.mean(0.0, |w| self.normal(w).below(), q).map(|p| p.min(1.0))
    }

    fn above(self, q: f64) -> Option<f64> {
        // Where q itself has nothing above, the search for the peak must begin where something has.
        self.mean((FARTHEST / 2.0 / q).ln().min(0.0), |w| self.normal(w).above(), q).map(|p| p.min(1.0))
    }

    fn mean(self, start: f64, of_range: impl Fn(f64) -> f64, q: f64) -> Option<f64> {
        over_scale(self.df, start, 1.0, |s| of_range(q * s).ln())
    }

    fn normal(self, width: f64) -> NormalRange {
        NormalRange { others: i32::try_from(self.means - 1).unwrap_or(i32::MAX), width }
    }
}

/// Whether q is a number at which the integrals are worth their while.
fn within_reach(q: f64) -> bool {
    (1e-100..1e100).contains(&q)
}

/// The range of `others` + 1 normal numbers at one value, by the distribution of the largest of them, z: all others lie
/// between z − `width` and z with probability A(z)^others, A(z) = Φ(z) − Φ(z − width).
struct NormalRange {
    others: i32,
    width: f64,
}

impl NormalRange {
    /// P(R ≤ w) = k ∫ φ(z) A(z)^(k−1) dz.
    fn below(&self) -> f64 {
        if self.width > FARTHEST {
            return 1.0;
        }
        self.over_largest(|z| density(z) * self.between(z).powi(self.others))
    }

    /// P(R > w) = k ∫ φ(z) (Φ(z)^(k−1) − A(z)^(k−1)) dz.
    fn above(&self) -> f64 {
        if self.width > FARTHEST {
            return 0.0;
        }
        let times = f64::from(self.others);
        self.over_largest(|z| {
            let all = phi(z);
            let share = (phi(z - self.width) / all).min(1.0);
            density(z) * all.powi(self.others) * -(times * (-share).ln_1p()).exp_m1()
        })
    }

    /// w dP/dw = k (k − 1) w ∫ φ(z) φ(z − w) A(z)^(k−2) dz.
    fn slope(&self) -> f64 {
        if self.width > FARTHEST {
            return 0.0;
        }
        let times = f64::from(self.others) * self.width;
        self.over_largest(|z| times * density(z) * density(z - self.width) * self.between(z).powi(self.others - 1))
    }

    /// k ∫ f(z) dz by the trapezoidal rule; the step is far below the width of the narrowest integrand, φ(z)^k.
    fn over_largest(&self, f: impl Fn(f64) -> f64) -> f64 {
        let k = f64::from(self.others + 1);
        let step = 0.65 / k.sqrt();
        let (from, to) = (-9.0, 9.0 + self.width / 2.0);
        let steps = ((to - from) / step).ceil() as u32;
        k * step * (0..=steps).map(|i| f(from + f64::from(i) * step)).sum::<f64>()
    }

    fn between(&self, z: f64) -> f64 {
        let from = z - self.width;
        if self.width <= 1.0 {
            return self.width * NODES.iter().map(|(at, weight)| weight * density(from + at * self.width)).sum::<f64>();
        }
        if from > 0.0 { phi(-from) - phi(-z) } else { phi(z) - phi(from) }
    }
}

/// The Gauss-Legendre rule of ten points on the unit interval (Abramowitz & Stegun 1964, table 25.4).
const NODES: [(f64, f64); 10] = [
    (0.013_046_735_741_414_128, 0.033_335_672_154_344_07),
    (0.067_468_316_655_507_73, 0.074_725_674_575_290_3),
    (0.160_295_215_850_487_8, 0.109_543_181_257_991_02),
    (0.283_302_302_935_376_4, 0.134_633_359_654_998_18),
    (0.425_562_830_509_184_4, 0.147_762_112_357_376_44),
    (0.574_437_169_490_815_6, 0.147_762_112_357_376_44),
    (0.716_697_697_064_623_6, 0.134_633_359_654_998_18),
    (0.839_704_784_149_512_2, 0.109_543_181_257_991_02),
    (0.932_531_683_344_492_3, 0.074_725_674_575_290_3),
    (0.986_953_264_258_585_9, 0.033_335_672_154_344_07),
];
