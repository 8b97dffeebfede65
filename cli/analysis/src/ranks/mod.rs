//! Analysis by ranks: Friedman's test with Kendall's W, and signed-rank comparisons of pairs of levels.
//!
//! Invariants: whether two numbers are tied is decided on the decimals that they stand for, never on what rounding made of
//! them; ranks and their sums are exact; and everything about a pair comes from its subjects' differences alone.

mod grain;
mod midranks;
mod null;
mod signed;
mod walsh;

pub use grain::Grain;
pub use signed::{MOST_EXACT, SignedRank};

use crate::contrasts::{ContrastKind, Family};
use crate::design::OneWithin;
use crate::distributions::{ChiSquare, FisherF};
use crate::{Note, Settings};
use grain::Graded;
use midranks::Midranks;

/// An analysis of one within-subject factor by ranks.
#[derive(Debug, Clone, PartialEq)]
pub struct RankAnalysis {
    /// The test of the factor; `None` without a complete subject.
    pub effect: Option<Friedman>,
    /// The pairs asked for, family by family in the order asked for.
    pub contrasts: Vec<SignedRank>,
    /// Why fields are `None`, and words of caution.
    pub notes: Vec<Note>,
    /// The subjects that Friedman's test used (indices of the design).
    pub used: Vec<usize>,
    /// The subjects that it left out because they lack a reading (indices of the design).
    pub incomplete: Vec<usize>,
}

/// Friedman's test of k levels on n complete subjects.
#[derive(Debug, Clone, PartialEq)]
pub struct Friedman {
    /// The sum of the ranks at each level, in order; tied readings share the mean of their ranks.
    pub rank_sums: Vec<f64>,
    /// 12 Σ (R_j − n (k + 1) / 2)² / (n k (k + 1) − Σ (t³ − t) / (k − 1)), over rank sums R_j and over runs of t tied
    /// readings within subjects (Friedman 1937, *Journal of the American Statistical Association* 32:675; the correction
    /// for ties as in Conover 1999, *Practical Nonparametric Statistics*, 5.8). `None` with one subject, one level, or
    /// where every subject's readings are all tied.
    pub chi2: Option<f64>,
    /// k − 1.
    pub df: f64,
    /// P(χ²_(k−1) > chi2).
    pub p: Option<f64>,
    /// chi2 / (n (k − 1)): Kendall's coefficient of concordance of the subjects, corrected for ties, from 0 to 1 (Kendall
    /// & Babington Smith 1939, *Annals of Mathematical Statistics* 10:275).
    pub kendall_w: Option<f64>,
    /// The *F* form of the test, which keeps its level better in small samples; `None` where `chi2` is.
    pub iman_davenport: Option<ImanDavenport>,
}

/// F = (n − 1) chi2 / (n (k − 1) − chi2) (Iman & Davenport 1980, *Communications in Statistics A* 9:571).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ImanDavenport {
    /// The statistic; `None` where it is infinite, since all subjects agree.
    pub f: Option<f64>,
    /// k − 1.
    pub df: f64,
    /// (n − 1) (k − 1).
    pub error_df: f64,
    /// P(F > f); 0 where *F* is infinite.
    pub p: Option<f64>,
}

/// Friedman's test over the complete subjects, and the pairs of levels that the settings ask for, each over the subjects
/// that have both of its levels.
///
/// `grain` is the step of which all readings are whole multiples, as exported (see [`Grain`]): ties are then exact. With
/// `None`, or where a reading is no multiple of it, numbers count as tied that differ by no more than the rounding of
/// readings to doubles can make. Any other family than pairs of levels is passed over with a note. Pairs come
/// in the order of the earlier level, then of the later; `p_adjusted` is over the family. The function has no failure of
/// its own: what a degenerate design leaves undefined is `None`, with a [`Note`].
#[must_use]
pub fn friedman(design: &OneWithin, grain: Option<Grain>, settings: &Settings) -> RankAnalysis {
    let mut notes = Vec::new();
    let graded = Graded::of(design, grain, &mut notes);
    let effect = friedman_test(&graded, &mut notes);
    let contrasts =
        settings.contrasts.iter().flat_map(|family| one_family(&graded, family, settings, &mut notes)).collect();
    RankAnalysis { effect, contrasts, notes, used: design.complete(), incomplete: design.incomplete() }
}

fn friedman_test(graded: &Graded, notes: &mut Vec<Note>) -> Option<Friedman> {
    let (levels, mut subjects, mut ties) = (graded.levels, 0_usize, 0.0);
    let mut doubled = vec![0_u64; levels];
    for row in graded.complete_rows() {
        let ranks = Midranks::of(&row);
        subjects += 1;
        ties += ranks.ties;
        doubled.iter_mut().zip(&ranks.doubled).for_each(|(sum, rank)| *sum += rank);
    }
    if subjects == 0 {
        notes.push(Note::NoCompleteSubject);
        return None;
    }
    let rank_sums: Vec<f64> = doubled.into_iter().map(|sum| sum as f64 / 2.0).collect();
    let chi2 = chi_square(&rank_sums, subjects, ties, notes);
    Some(tests(rank_sums, chi2, subjects))
}

fn chi_square(rank_sums: &[f64], subjects: usize, ties: f64, notes: &mut Vec<Note>) -> Option<f64> {
    let (n, k) = (subjects as f64, rank_sums.len() as f64);
    let middle = n * (k + 1.0) / 2.0;
    let between: f64 = rank_sums.iter().map(|sum| (sum - middle).powi(2)).sum();
    let within = n * k * (k + 1.0) - ties / (k - 1.0);
    let why_not = match (subjects, rank_sums.len()) {
        (_, ..=1) => Some(Note::OneLevel),
        (1, _) => Some(Note::OneSubject),
        // Every subject's k readings make one run: Σ (t³ − t) = n (k³ − k), which in doubles is exact.
        _ if ties >= n * (k * k * k - k) => Some(Note::AllTied),
        _ => None,
    };
    notes.extend(why_not);
    why_not.is_none().then(|| 12.0 * between / within)
}

fn tests(rank_sums: Vec<f64>, chi2: Option<f64>, subjects: usize) -> Friedman {
    let (n, df) = (subjects as f64, rank_sums.len() as f64 - 1.0);
    Friedman {
        chi2,
        df,
        p: chi2.and_then(|chi2| ChiSquare::new(df).ok()?.sf(chi2)),
        kendall_w: chi2.map(|chi2| (chi2 / (n * df)).min(1.0)),
        iman_davenport: chi2.map(|chi2| iman_davenport(chi2, n, df)),
        rank_sums,
    }
}

fn iman_davenport(chi2: f64, n: f64, df: f64) -> ImanDavenport {
    let error_df = (n - 1.0) * df;
    let left = n * df - chi2;
    // With all subjects of one mind only rounding is left.
    let f = (left > 1e-12 * n * df).then(|| (n - 1.0) * chi2 / left);
    let p = f.map_or(Some(0.0), |f| FisherF::new(df, error_df).ok()?.sf(f));
    ImanDavenport { f, df, error_df, p }
}

fn one_family(graded: &Graded, family: &Family, settings: &Settings, notes: &mut Vec<Note>) -> Vec<SignedRank> {
    let levels = graded.levels;
    let kinds: Vec<ContrastKind> = match family {
        Family::Pairwise => (0..levels)
            .flat_map(|against| (against + 1..levels).map(move |level| ContrastKind::Pairwise { level, against }))
            .collect(),
        Family::EachVsFirst => (1..levels).map(|level| ContrastKind::EachVsFirst { level, against: 0 }).collect(),
        _ => {
            notes.push(Note::OnlyPairsByRanks);
            Vec::new()
        }
    };
    let mut found: Vec<SignedRank> =
        kinds.into_iter().map(|kind| signed::compare(graded, kind, settings.confidence, notes)).collect();
    let adjusted = settings.multiplicity.adjust(&found.iter().map(|pair| pair.p).collect::<Vec<_>>());
    found.iter_mut().zip(adjusted).for_each(|(pair, p)| pair.p_adjusted = p);
    found
}
