//! Simulated studies: how often the planned test rejects where the readings are what the plan assumes.
//!
//! Invariant: one seed, one answer; each study is analysed as the program analyses a real one.

use revisant_analysis::Settings;
use revisant_analysis::anova::{Term, factorial};
use revisant_analysis::design::{Design, DesignError, Factor, FactorId};
use revisant_analysis::power::{Alpha, Assumed, PlannedEffect};

use crate::chance::Chance;

/// How often simulated studies rejected.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Simulated {
    /// Studies.
    pub runs: u32,
    /// What they came from.
    pub seed: u64,
    /// Those whose test rejected.
    pub rejected: u32,
}

/// The standard normal number that leaves 2.5 % above it.
const Z: f64 = 1.959_963_984_540_054;

impl Simulated {
    /// The share of studies that rejected.
    pub fn power(self) -> f64 {
        f64::from(self.rejected) / f64::from(self.runs.max(1))
    }

    /// What chance leaves open about it, with 95 % confidence (Wilson 1927, *Journal of the American Statistical
    /// Association* 22:209).
    pub fn interval(self) -> (f64, f64) {
        let (n, share) = (f64::from(self.runs.max(1)), self.power());
        let centre = (share + Z * Z / (2.0 * n)) / (1.0 + Z * Z / n);
        let half = Z * (share * (1.0 - share) / n + Z * Z / (4.0 * n * n)).sqrt() / (1.0 + Z * Z / n);
        // At none and at all the limit is the share itself, which rounding must not pass.
        ((centre - half).clamp(0.0, share), (centre + half).clamp(share, 1.0))
    }
}

/// What is simulated.
#[derive(Debug, Clone, Copy)]
pub struct Study<'a> {
    /// Means and covariance.
    pub assumed: &'a Assumed,
    /// The effect that is tested.
    pub effect: PlannedEffect,
    /// Complete subjects in each group.
    pub sizes: &'a [usize],
    /// The error rate.
    pub alpha: Alpha,
}

impl Study<'_> {
    /// So many studies with normal readings, tested with the Greenhouse-Geisser correction by the estimated epsilon
    /// (an effect between subjects without); a study without a p value does not reject. `step` is told after each.
    ///
    /// # Errors
    /// [`DesignError`] where the readings are no design, such as without a subject.
    pub fn simulate(&self, runs: u32, seed: u64, mut step: impl FnMut()) -> Result<Simulated, DesignError> {
        let mut chance = Chance::new(seed, "rehearse");
        let mut rejected = 0;
        for _ in 0..runs {
            let p = self.p(&self.study(&mut chance)?);
            rejected += u32::from(p.is_some_and(|p| p <= self.alpha.level()));
            step();
        }
        Ok(Simulated { runs, seed, rejected })
    }

    fn study(&self, chance: &mut Chance) -> Result<Design, DesignError> {
        let mut subjects = Vec::with_capacity(self.sizes.iter().sum());
        for (group, (size, means)) in self.sizes.iter().zip(self.assumed.means()).enumerate() {
            subjects.extend((0..*size).map(|_| ([group], subject(means, self.assumed.factor(), chance))));
        }
        Design::new(vec![Factor::of(self.assumed.visits())?], vec![self.assumed.groups()], &subjects)
    }

    fn p(&self, design: &Design) -> Option<f64> {
        let (arm, visit) = (Term::main(FactorId::Between(0)), Term::main(FactorId::Within(0)));
        let term = match self.effect {
            PlannedEffect::Within => visit,
            PlannedEffect::Between => arm,
            PlannedEffect::Interaction => Term { between: arm.between, within: visit.within },
        };
        let result = factorial(design, &Settings::default());
        let effect = result.effect(term)?;
        match effect.corrected {
            Some(corrected) => corrected.greenhouse_geisser?.p,
            None => effect.p,
        }
    }
}

/// A subject's readings: the means plus L z, with independent standard normal z.
fn subject(means: &[f64], factor: &[Vec<f64>], chance: &mut Chance) -> Vec<Option<f64>> {
    let z: Vec<f64> = means.iter().map(|_| chance.normal()).collect();
    let error = |row: &Vec<f64>| row.iter().zip(&z).map(|(l, z)| l * z).sum::<f64>();
    means.iter().zip(factor).map(|(mean, row)| Some(mean + error(row))).collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use revisant_analysis::power::{compound_symmetry, covariance, power};

    fn assumed(means: &[&[f64]]) -> Assumed {
        let correlation = compound_symmetry(3, 0.5);
        Assumed::new(means.iter().map(|own| own.to_vec()).collect(), covariance(&[1.0; 3], &correlation)).unwrap()
    }

    #[test]
    fn simulated_studies_agree_with_the_formula_where_it_is_exact() {
        let alpha = Alpha::new(0.05).unwrap();
        let two = assumed(&[&[0.0, 0.3, 0.6], &[0.0, 0.0, 0.0]]);
        let one = assumed(&[&[0.0, 0.3, 0.5]]);
        for (assumed, effect, sizes) in [
            (&one, PlannedEffect::Within, vec![20]),
            (&two, PlannedEffect::Within, vec![18, 12]),
            (&two, PlannedEffect::Interaction, vec![25, 25]),
            (&two, PlannedEffect::Between, vec![20, 30]),
        ] {
            let study = Study { assumed, effect, sizes: &sizes, alpha };
            // With a common correlation the uncorrected test is exact; the corrected one loses little.
            let found = study.simulate(1500, 3, || {}).unwrap();
            let formula = power(assumed, effect, &sizes, alpha).unwrap().power.unwrap();
            assert!((found.power() - formula).abs() < 0.05, "{effect:?}: {formula} and {found:?}");
        }
    }

    #[test]
    fn one_seed_one_answer() {
        let assumed = assumed(&[&[0.0, 0.3, 0.5]]);
        let alpha = Alpha::new(0.05).unwrap();
        let study = Study { assumed: &assumed, effect: PlannedEffect::Within, sizes: &[12], alpha };
        let of = |seed| study.simulate(200, seed, || {}).unwrap();
        assert_eq!(of(7), of(7));
        assert_ne!(of(7).rejected, of(8).rejected);
    }

    #[test]
    fn what_chance_leaves_open_is_never_beyond_nothing_and_all() {
        for rejected in [0, 1, 50, 100] {
            let found = Simulated { runs: 100, seed: 1, rejected };
            let (low, high) = found.interval();
            assert!(0.0 <= low && low <= found.power() && found.power() <= high && high <= 1.0, "{low} {high}");
        }
        // Newcombe 1998, Statistics in Medicine 17:857: 81 of 263 give 0.2553 to 0.3662.
        let (low, high) = Simulated { runs: 263, seed: 1, rejected: 81 }.interval();
        assert!((low - 0.2553).abs() < 5e-5 && (high - 0.3662).abs() < 5e-5, "{low} {high}");
    }
}
