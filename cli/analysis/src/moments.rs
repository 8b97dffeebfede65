//! Sums, means and sums of squares that keep what the readings hold.
//!
//! Invariants: sums and means carry a second double for what the first cannot hold, and only deviations from such a
//! mean are ever squared, so an offset common to all readings costs no digits. The spread of scores or of one
//! level is exactly 0 where the rounding of the readings to doubles could have made it.

/// `a + b` and what rounding took from it (Knuth 1997, *The Art of Computer Programming* 2, 4.2.2, theorem B).
fn two_sum(a: f64, b: f64) -> (f64, f64) {
    let sum = a + b;
    let shadow = sum - a;
    (sum, (a - (sum - shadow)) + (b - shadow))
}

/// A number held in two doubles: about 32 digits.
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub(crate) struct Twofold {
    hi: f64,
    lo: f64,
}

impl Twofold {
    pub fn value(self) -> f64 {
        self.hi + self.lo
    }

    pub fn minus(self, other: Self) -> Self {
        let (hi, lo) = two_sum(self.hi, -other.hi);
        Self { hi, lo: lo + (self.lo - other.lo) }
    }

    pub fn below(self, x: f64) -> Self {
        Self { hi: x, lo: 0.0 }.minus(self)
    }
}

/// A running sum with compensation (Neumaier 1974, *Zeitschrift für angewandte Mathematik und Mechanik* 54:39).
#[derive(Debug, Clone, Copy, Default)]
pub(crate) struct Sum(Twofold);

impl Sum {
    pub fn add(&mut self, x: f64) {
        let (hi, lost) = two_sum(self.0.hi, x);
        self.0 = Twofold { hi, lo: self.0.lo + lost };
    }

    pub fn of(values: impl IntoIterator<Item = f64>) -> Self {
        let mut sum = Self::default();
        values.into_iter().for_each(|x| sum.add(x));
        sum
    }

    /// The sum of what a function makes of each value, in strands that the processor adds side by side.
    pub fn over_each(values: &[f64], of: impl Fn(f64) -> f64) -> Self {
        const STRANDS: usize = 8;
        let (chunks, rest) = values.as_chunks::<STRANDS>();
        let (mut hi, mut lo) = ([0.0; STRANDS], [0.0; STRANDS]);
        for chunk in chunks {
            for ((hi, lo), &x) in hi.iter_mut().zip(&mut lo).zip(chunk) {
                let (sum, lost) = two_sum(*hi, of(x));
                *hi = sum;
                *lo += lost;
            }
        }
        let mut sum = Self::of(rest.iter().map(|&x| of(x)));
        hi.into_iter().zip(lo).for_each(|(hi, lo)| sum.join(Self(Twofold { hi, lo })));
        sum
    }

    /// Takes in all of another sum.
    pub fn join(&mut self, other: Self) {
        self.add(other.0.hi);
        self.0.lo += other.0.lo;
    }

    pub fn value(self) -> f64 {
        self.0.value()
    }

    /// The sum divided by `count`, to the precision of the sum itself.
    pub fn over(self, count: usize) -> Twofold {
        let n = count.max(1) as f64;
        let hi = self.0.value() / n;
        // What of the high part the quotient missed is exact in a fused operation.
        let missed = (-hi).mul_add(n, self.0.hi);
        Twofold { hi, lo: (missed + self.0.lo) / n }
    }
}

/// The sum of squares that rounding to doubles alone can put into the deviations of these readings from a model:
/// Σ (ε y)². A reading exported as a decimal is off by at most half of ε|y|, a mean over replicates by little more,
/// and least squares never lengthens a vector of errors.
pub(crate) fn rounding(readings: impl IntoIterator<Item = f64>) -> f64 {
    f64::EPSILON * f64::EPSILON * readings.into_iter().map(|y| y * y).sum::<f64>()
}

/// The [`rounding`] of readings from which an offset was taken.
pub(crate) fn rounding_of(readings: &[f64], offset: f64) -> f64 {
    // A bound needs no compensation, only several strands for the processor to add side by side.
    let (chunks, rest) = readings.as_chunks::<8>();
    let mut strands = [0.0; 8];
    for chunk in chunks {
        strands.iter_mut().zip(chunk).for_each(|(strand, y)| *strand += (y + offset) * (y + offset));
    }
    let rest: f64 = rest.iter().map(|y| (y + offset) * (y + offset)).sum();
    f64::EPSILON * f64::EPSILON * (strands.iter().sum::<f64>() + rest)
}

/// Σ x².
pub(crate) fn squares(values: &[f64]) -> Sum {
    Sum::over_each(values, |x| x * x)
}

/// Count, mean, and sum of squared deviations from the mean.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Moments {
    pub n: usize,
    /// 0 where `n` is 0.
    pub mean: f64,
    ss: f64,
}

impl Moments {
    /// The moments of `values`, computed from readings whose [`rounding`] is given.
    pub fn of(values: &[f64], rounding: f64) -> Self {
        let own = Self::of_readings_with(values, rounding);
        let flat_at_zero = own.ss == 0.0 && own.n as f64 * own.mean.powi(2) <= rounding;
        Self { mean: if flat_at_zero { 0.0 } else { own.mean }, ..own }
    }

    /// The moments of readings themselves. Readings near zero are what they are: only differences can vanish into rounding.
    pub fn of_readings(readings: &[f64]) -> Self {
        Self::of_readings_with(readings, rounding_of(readings, 0.0))
    }

    fn of_readings_with(values: &[f64], rounding: f64) -> Self {
        let n = values.len();
        let mean = Sum::over_each(values, |x| x).over(n);
        let ss = Sum::over_each(values, |x| mean.below(x).value().powi(2)).value();
        Self { n, mean: mean.value(), ss: if ss <= rounding { 0.0 } else { ss } }
    }

    /// Σ (x − x̄)².
    pub fn ss(self) -> f64 {
        self.ss
    }

    /// √(Σ (x − x̄)² / (n − 1)); `None` below two values.
    pub fn sd(self) -> Option<f64> {
        (self.n > 1).then(|| (self.ss / (self.n as f64 - 1.0)).sqrt())
    }

    /// SD / √n; `None` below two values.
    pub fn se(self) -> Option<f64> {
        self.sd().map(|sd| sd / (self.n as f64).sqrt())
    }
}
