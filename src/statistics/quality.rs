//! Tests of a batch's quality: are the settings drawn as declared, are the outcomes those of the batch before, are there rounds enough?
//!
//! All tests are likelihood-ratio (G) tests. For observed counts `n` and expected counts `e` of the same total
//!
//! ```text
//! G = 2 Σ n ln(n / e) = 2 Σ e φ((n − e)/e),   φ(u) = (1+u) ln(1+u) − u ≥ 0,
//! ```
//!
//! follows approximately a chi-squared law if the hypothesis holds (S. S. Wilks, Ann. Math. Stat. 9, 60 (1938); R. R. Sokal and
//! F. J. Rohlf, Biometry). The second form is summed: its terms are not negative, so a small G of large counts keeps its digits. The
//! approximation asks for a few expected rounds in every cell; settings with too few rounds are reported on their own. P-values are
//! rounded to nearest: they are grounds for a warning, and no certified figure depends on them.

use std::fmt;

use serde::{Deserialize, Serialize};

use super::chi_squared::survival;
use crate::{
    counts::{Counts, NORMALISATION_SLACK},
    fault::Fault,
    scenario::Setting,
};

/// Rounds that a setting should have at least; tests and intervals mean little below.
pub const LEAST_ROUNDS: u64 = 100;

/// What a rig's profile may have a batch refused for, whatever its bound says.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum Objection {
    /// The numbers of rounds per setting do not fit the declared, or committed, setting distribution.
    SettingImbalance,
    /// The outcomes are distributed otherwise than in the rig's newest certified batch.
    OutcomeDrift,
    /// A setting has fewer rounds than [`LEAST_ROUNDS`].
    FewRounds,
    /// Lost rounds were left out on the assumption of fair sampling.
    FairSampling,
}

/// Outcome of one likelihood-ratio test.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LikelihoodRatio {
    /// `G ≥ 0`, dimensionless.
    pub statistic: f64,
    pub degrees_of_freedom: u32,
    /// Probability of so large a G if the hypothesis holds, in `(0, 1]`.
    pub p_value: f64,
}

impl LikelihoodRatio {
    fn new(statistic: f64, cells: usize) -> Self {
        let degrees_of_freedom = u32::try_from(cells.saturating_sub(1)).unwrap_or(u32::MAX);
        Self { statistic, degrees_of_freedom, p_value: survival(statistic, degrees_of_freedom) }
    }

    /// P-value corrected for the number of tests that are looked at together (Bonferroni): `min(1, m p)`.
    pub fn corrected(&self, tests: usize) -> f64 {
        (self.p_value * tests as f64).min(1.0)
    }
}

/// Something about a batch that its reader should know. [`fmt::Display`] gives it as a sentence.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(tag = "concern", rename_all = "kebab-case", deny_unknown_fields)]
pub enum Finding {
    /// The numbers of rounds per setting do not fit the declared setting distribution.
    SettingImbalance { test: LikelihoodRatio, corrected_p_value: f64 },
    /// The outcomes at a setting are distributed otherwise than in the batch before.
    OutcomeDrift { setting: Setting, test: LikelihoodRatio, corrected_p_value: f64 },
    /// A setting has fewer rounds than asked for.
    FewRounds { setting: Setting, rounds: u64, least: u64 },
}

impl Finding {
    /// What a profile may say about such a finding.
    pub fn objection(&self) -> Objection {
        match self {
            Self::SettingImbalance { .. } => Objection::SettingImbalance,
            Self::OutcomeDrift { .. } => Objection::OutcomeDrift,
            Self::FewRounds { .. } => Objection::FewRounds,
        }
    }
}

impl fmt::Display for Finding {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        match self {
            Self::SettingImbalance { test, corrected_p_value } => write!(
                f,
                "the rounds per setting do not fit the declared setting distribution: a deviation as large as this (G = {:.1} on {} degrees of \
                 freedom) has a probability of at most {corrected_p_value:.2e}, corrected for the number of tests",
                test.statistic, test.degrees_of_freedom
            ),
            Self::OutcomeDrift { setting, test, corrected_p_value } => write!(
                f,
                "the outcomes of preparation {} with measurement {} have drifted since the previous batch: a difference as large as this \
                 (G = {:.1} on {} degrees of freedom) has a probability of at most {corrected_p_value:.2e}, corrected for the number of tests",
                setting.x, setting.y, test.statistic, test.degrees_of_freedom
            ),
            Self::FewRounds { setting, rounds, least } => {
                let noun = if *rounds == 1 { "round" } else { "rounds" };
                write!(f, "preparation {} with measurement {} has {rounds} {noun}, fewer than {least}", setting.x, setting.y)
            }
        }
    }
}

/// What a batch is compared with.
#[derive(Debug, Clone, Copy)]
pub struct Expectations<'a> {
    /// Declared setting distribution `π(x,y)`, as `[x][y]`, adding up to 1.
    pub distribution: Option<&'a [Vec<f64>]>,
    /// Counts of the batch before.
    pub previous: Option<&'a Counts>,
    /// Fewest rounds a setting should have.
    pub least_rounds: u64,
    /// Corrected p-value below which a test is reported, in `(0, 1)`.
    pub significance: f64,
}

/// Everything worth a warning: the tests whose corrected p-value is below the significance, and every setting with too few rounds.
///
/// All tests of the batch, one for the settings and one for the outcomes of each setting, are corrected together: if all hypotheses hold
/// anything is reported with a probability of at most the significance, as far as the chi-squared approximation goes.
///
/// # Errors
/// A distribution or previous counts that do not fit the batch; pointers start with `/distribution` or `/previous`.
pub fn examine(counts: &Counts, expectations: &Expectations) -> Result<Vec<Finding>, Fault> {
    let balance = match expectations.distribution {
        Some(distribution) => Some(setting_balance(counts, distribution).map_err(|fault| fault.under("/distribution"))?),
        None => None,
    };
    let drift = match expectations.previous {
        Some(previous) => outcome_homogeneity(counts, previous).map_err(|fault| fault.under("/previous"))?,
        None => Vec::new(),
    };
    // Tests without degrees of freedom cannot fail.
    let can_fail = |test: &LikelihoodRatio| usize::from(test.degrees_of_freedom > 0);
    let tests = balance.as_ref().map_or(0, can_fail) + drift.iter().map(|(_, test)| can_fail(test)).sum::<usize>();
    let imbalance = balance.map(|test| Finding::SettingImbalance { test, corrected_p_value: test.corrected(tests) });
    let drifted =
        drift.into_iter().map(|(setting, test)| Finding::OutcomeDrift { setting, test, corrected_p_value: test.corrected(tests) });
    let significant = |finding: &Finding| match finding {
        Finding::SettingImbalance { corrected_p_value, .. } | Finding::OutcomeDrift { corrected_p_value, .. } => {
            *corrected_p_value < expectations.significance
        }
        Finding::FewRounds { .. } => true,
    };
    let few = few_rounds(counts, expectations.least_rounds);
    Ok(imbalance.into_iter().chain(drifted).chain(few).filter(significant).collect())
}

/// G-test of the rounds per setting against a declared distribution `π(x,y)`, for settings that are drawn independently.
///
/// # Errors
/// A distribution of another shape, with a probability that is not above 0 (every setting of a batch has rounds), or that does not add
/// up to 1 within [`NORMALISATION_SLACK`]; pointers are relative to the distribution.
pub fn setting_balance(counts: &Counts, distribution: &[Vec<f64>]) -> Result<LikelihoodRatio, Fault> {
    let shape = |pointer: String| Fault::new(pointer, "needs one probability per preparation and measurement, as the counts have");
    if distribution.len() != counts.table().len() {
        return Err(shape(String::new()));
    }
    let mut cells = Vec::new();
    for (x, (table, probabilities)) in counts.table().iter().zip(distribution).enumerate() {
        if table.len() != probabilities.len() {
            return Err(shape(format!("/{x}")));
        }
        for (y, (outcomes, p)) in table.iter().zip(probabilities).enumerate() {
            if !(*p > 0.0 && *p <= 1.0) {
                return Err(Fault::new(format!("/{x}/{y}"), format!("the probability of a setting is above 0 and at most 1, is {p}")));
            }
            cells.push((outcomes.iter().sum::<u64>() as f64, *p));
        }
    }
    let sum: f64 = cells.iter().map(|(_, p)| p).sum();
    if (sum - 1.0).abs() > NORMALISATION_SLACK {
        return Err(Fault::new("", format!("the probabilities of the settings add up to 1, not to {sum}")));
    }
    let total = counts.total() as f64;
    let half: f64 = cells.iter().map(|(n, p)| deviance(*n, total * p / sum)).sum();
    Ok(LikelihoodRatio::new(2.0 * half, cells.len()))
}

/// G-test, for each setting, of the hypothesis that both batches drew their outcomes from the same distribution.
///
/// Outcomes that occur in neither batch do not count as cells. With fewer than two cells left the p-value is 1.
///
/// # Errors
/// Previous counts of another shape; pointers are relative to the previous counts.
pub fn outcome_homogeneity(counts: &Counts, previous: &Counts) -> Result<Vec<(Setting, LikelihoodRatio)>, Fault> {
    let shape = |counts: &Counts| [counts.table().len(), counts.table()[0].len(), counts.table()[0][0].len()];
    if shape(counts) != shape(previous) {
        return Err(Fault::new("", "the previous batch has other numbers of preparations, measurements or outcomes"));
    }
    let [preparations, measurements, _] = shape(counts);
    let settings = (0..preparations).flat_map(|x| (0..measurements).map(move |y| Setting { x, y }));
    Ok(settings.map(|setting| (setting, homogeneity(counts.at(setting), previous.at(setting)))).collect())
}

fn homogeneity(now: &[u64], before: &[u64]) -> LikelihoodRatio {
    let (rounds_now, rounds_before) = (now.iter().sum::<u64>() as f64, before.iter().sum::<u64>() as f64);
    let total = rounds_now + rounds_before;
    let cells: Vec<[f64; 2]> = now.iter().zip(before).map(|(a, b)| [*a as f64, *b as f64]).filter(|[a, b]| a + b > 0.0).collect();
    let half: f64 =
        cells.iter().map(|[a, b]| deviance(*a, (a + b) * rounds_now / total) + deviance(*b, (a + b) * rounds_before / total)).sum();
    LikelihoodRatio::new(2.0 * half, cells.len())
}

/// Settings with fewer than `least` rounds.
pub fn few_rounds(counts: &Counts, least: u64) -> Vec<Finding> {
    let mut findings = Vec::new();
    for (x, table) in counts.table().iter().enumerate() {
        for (y, outcomes) in table.iter().enumerate() {
            let rounds = outcomes.iter().sum();
            if rounds < least {
                findings.push(Finding::FewRounds { setting: Setting { x, y }, rounds, least });
            }
        }
    }
    findings
}

/// `n ln(n/e) − (n − e) ≥ 0`, for `n ≥ 0` and `e > 0`.
fn deviance(n: f64, e: f64) -> f64 {
    if n == 0.0 {
        return e;
    }
    let u = (n - e) / e;
    (e * ((1.0 + u) * libm::log1p(u) - u)).max(0.0)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::scenario::Geometry;

    fn counts(table: Vec<Vec<Vec<u64>>>) -> Counts {
        let geometry =
            Geometry { preparations: table.len(), measurements: table[0].len(), outcomes: table[0][0].len(), carrier_dimension: 2 };
        Counts::try_new(table, geometry).unwrap()
    }

    /// Sokal and Rohlf's way of writing G, straight from the definition.
    fn plain(cells: &[(f64, f64)]) -> f64 {
        2.0 * cells.iter().map(|(n, e)| if *n > 0.0 { n * (n / e).ln() } else { 0.0 }).sum::<f64>()
    }

    #[test]
    fn setting_balance_is_the_likelihood_ratio() {
        let batch = counts(vec![vec![vec![30, 33], vec![20, 11]]]);
        // 63 and 31 rounds where 9 : 7 were declared.
        let test = setting_balance(&batch, &[vec![0.5625, 0.4375]]).unwrap();
        let expected = plain(&[(63.0, 52.875), (31.0, 41.125)]);
        assert!((test.statistic - expected).abs() < 1e-12, "{} {expected}", test.statistic);
        assert_eq!(test.degrees_of_freedom, 1);
        assert!((test.p_value - survival(expected, 1)).abs() < 1e-12);
        assert!(test.p_value > 0.03 && test.p_value < 0.04, "{}", test.p_value);
    }

    #[test]
    fn settings_as_declared_are_no_concern_and_digits_survive_large_counts() {
        let table = vec![vec![vec![1 << 50, 1 << 50]; 2]; 2];
        let test = setting_balance(&counts(table.clone()), &[vec![0.25; 2], vec![0.25; 2]]).unwrap();
        assert_eq!((test.statistic, test.p_value, test.degrees_of_freedom), (0.0, 1.0, 3));
        // A shift of u from one setting to another of e rounds gives G = 2 u²/e to leading order.
        let (mut shifted, u) = (table, 1u64 << 25);
        shifted[0][0][0] += u;
        shifted[1][1][0] -= u;
        let test = setting_balance(&counts(shifted), &[vec![0.25; 2], vec![0.25; 2]]).unwrap();
        assert!((test.statistic - 1.0).abs() < 1e-6, "{}", test.statistic);
    }

    #[test]
    fn drift_is_found_at_the_setting_where_it_is() {
        let before = counts(vec![vec![vec![853_000, 147_000]; 2]; 4]);
        let mut table = vec![vec![vec![426_400, 73_600]; 2]; 4];
        table[2][1] = vec![421_500, 78_500];
        let now = counts(table);
        let expectations = Expectations { distribution: None, previous: Some(&before), least_rounds: 10, significance: 1e-3 };
        let findings = examine(&now, &expectations).unwrap();
        let [Finding::OutcomeDrift { setting, test, corrected_p_value }] = findings.as_slice() else { panic!("{findings:?}") };
        assert_eq!(*setting, Setting { x: 2, y: 1 });
        let pooled = (421_500.0 + 853_000.0) / 1_500_000.0;
        let expected = plain(&[
            (421_500.0, 500_000.0 * pooled),
            (78_500.0, 500_000.0 * (1.0 - pooled)),
            (853_000.0, 1_000_000.0 * pooled),
            (147_000.0, 1_000_000.0 * (1.0 - pooled)),
        ]);
        assert!((test.statistic - expected).abs() < 1e-6 * expected);
        assert_eq!(*corrected_p_value, 8.0 * test.p_value);
        assert!(findings[0].to_string().contains("preparation 2 with measurement 1 have drifted"), "{}", findings[0]);
    }

    #[test]
    fn p_values_are_corrected_for_all_tests_of_the_batch() {
        // A deviation with a p-value of about 1 % is a finding alone, and none among nine tests.
        let table = vec![vec![vec![500, 500]; 2]; 4];
        let mut off = table.clone();
        off[0][0] = vec![558, 442];
        let (before, now) = (counts(table), counts(off));
        let (_, single) = outcome_homogeneity(&now, &before).unwrap()[0];
        assert!(single.p_value > 0.005 && single.p_value < 0.012, "{}", single.p_value);
        let uniform = vec![vec![0.125; 2]; 4];
        let with = |significance| Expectations { distribution: Some(&uniform), previous: Some(&before), least_rounds: 0, significance };
        assert!(examine(&now, &with(0.05)).unwrap().is_empty());
        // As significant as asked for is not below it.
        assert!(examine(&now, &with(9.0 * single.p_value)).unwrap().is_empty());
        let found = examine(&now, &with(0.12)).unwrap();
        assert!(
            matches!(found.as_slice(), [Finding::OutcomeDrift { corrected_p_value, .. }] if *corrected_p_value == 9.0 * single.p_value)
        );
    }

    /// A setting with one outcome cannot drift, and is no reason to correct for one test more.
    #[test]
    fn tests_that_cannot_fail_are_not_counted() {
        let before = counts(vec![vec![vec![500, 500], vec![1000, 0]]]);
        let now = counts(vec![vec![vec![600, 400], vec![1000, 0]]]);
        let expectations = Expectations { distribution: None, previous: Some(&before), least_rounds: 0, significance: 0.05 };
        let found = examine(&now, &expectations).unwrap();
        let [Finding::OutcomeDrift { test, corrected_p_value, .. }] = found.as_slice() else { panic!("{found:?}") };
        assert_eq!(*corrected_p_value, test.p_value);
    }

    /// Decimals of probabilities need not add up to 1 exactly: the expected rounds do add up to the total.
    #[test]
    fn expected_rounds_add_up_to_the_total() {
        let p = 0.25 * (1.0 + 0.5 * NORMALISATION_SLACK);
        let test = setting_balance(&counts(vec![vec![vec![1 << 50, 1 << 50]; 2]; 2]), &[vec![p; 2], vec![p; 2]]).unwrap();
        assert!(test.statistic < 1e-9, "{}", test.statistic);
    }

    #[test]
    fn outcomes_that_never_occur_are_no_cells() {
        let before = counts(vec![vec![vec![100, 0, 300]]]);
        let now = counts(vec![vec![vec![50, 0, 150]]]);
        let (_, test) = outcome_homogeneity(&now, &before).unwrap()[0];
        assert_eq!((test.degrees_of_freedom, test.p_value), (1, 1.0));
        let constant = counts(vec![vec![vec![7, 0, 0]]]);
        let (_, test) = outcome_homogeneity(&constant, &constant).unwrap()[0];
        assert_eq!((test.degrees_of_freedom, test.p_value), (0, 1.0));
        // An outcome that is new in this batch does count: n ln(n/e) for the rest, e for the empty cell.
        let fresh = counts(vec![vec![vec![50, 10, 140]]]);
        let (_, test) = outcome_homogeneity(&fresh, &before).unwrap()[0];
        assert_eq!(test.degrees_of_freedom, 2);
        assert!(test.p_value < 1e-4, "{}", test.p_value);
    }

    #[test]
    fn few_rounds_are_reported_setting_by_setting() {
        let batch = counts(vec![vec![vec![1, 0], vec![600, 400]]]);
        let findings = few_rounds(&batch, 1000);
        assert_eq!(findings, vec![Finding::FewRounds { setting: Setting { x: 0, y: 0 }, rounds: 1, least: 1000 }]);
        assert_eq!(findings[0].to_string(), "preparation 0 with measurement 0 has 1 round, fewer than 1000");
    }

    #[test]
    fn what_does_not_fit_is_refused_with_its_place() {
        let batch = counts(vec![vec![vec![10, 10]; 2]; 2]);
        let pointer = |distribution: &[Vec<f64>]| setting_balance(&batch, distribution).unwrap_err().pointer;
        assert_eq!(pointer(&[vec![0.5, 0.5]]), "");
        assert_eq!(pointer(&[vec![0.5, 0.5], vec![0.5]]), "/1");
        assert_eq!(pointer(&[vec![0.5, 0.5], vec![0.0, 0.0]]), "/1/0");
        assert_eq!(pointer(&[vec![0.3, 0.3], vec![0.3, 0.3]]), "");
        let other = counts(vec![vec![vec![10, 10, 10]; 2]; 2]);
        let expectations = Expectations { distribution: None, previous: Some(&other), least_rounds: 0, significance: 0.01 };
        assert_eq!(examine(&batch, &expectations).unwrap_err().pointer, "/previous");
    }

    /// The share of p-values below a level is that level, over many simulated batches of a fixed generator.
    #[test]
    fn p_values_are_uniform_when_nothing_is_wrong() {
        let mut state = 88_172_645_463_325_252u64;
        let mut uniform = move || {
            state ^= state << 13;
            state ^= state >> 7;
            state ^= state << 17;
            (state >> 11) as f64 / (1u64 << 53) as f64
        };
        let mut draw = |rounds: usize| {
            let mut cells = [0u64; 3];
            for _ in 0..rounds {
                let u = uniform();
                cells[usize::from(u > 0.5) + usize::from(u > 0.8)] += 1;
            }
            cells
        };
        let below = (0..2000).filter(|_| homogeneity(&draw(300), &draw(500)).p_value < 0.1).count();
        // Two hundred are expected; 13 is the standard deviation.
        assert!((140..260).contains(&below), "{below}");
    }
}
