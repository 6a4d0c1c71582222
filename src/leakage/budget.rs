//! Contributions added up.
//!
//! The carrier of a budget is the product of its contributions' carriers: dimensions multiply, `d = Π d_i`, and since the projectors
//! commute, `1 − Π V_i ≤ Σ (1 − V_i)`, so that
//!
//! ```text
//! ε ≤ Σ ε_i
//! ```
//!
//! without any independence between the contributions. The failure probabilities add up in the same way (union bound). Both sums are
//! taken exactly over the decimals that are reported and rounded up once, at most 1.

use num_rational::BigRational;
use num_traits::{ToPrimitive, Zero};
use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

use super::{
    coherent::Coherent,
    coincidence::Coincidence,
    estimate::{Calculator, Estimate, Input},
    g2::G2,
    heralded::Heralded,
    overlap::Overlap,
    rounding::exact_weight_up,
    side_mode::SideMode,
    thermal::Thermal,
    vacuum::Vacuum,
};
use crate::{
    exact::decimal,
    fault::Fault,
    scenario::{LeakageReading, MAX_CARRIER_DIMENSION},
};

/// Most contributions a budget may have.
pub const MAX_CONTRIBUTIONS: usize = 64;

/// One term of a budget, as it is written in a document.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(tag = "source", rename_all = "kebab-case")]
pub enum Contribution {
    Coherent(Coherent),
    Thermal(Thermal),
    G2(G2),
    Coincidence(Coincidence),
    Heralded(Heralded),
    Vacuum(Vacuum),
    Overlap(Overlap),
    SideMode(SideMode),
}

impl Contribution {
    fn calculator(&self) -> &dyn Calculator {
        match self {
            Self::Coherent(source) => source,
            Self::Thermal(source) => source,
            Self::G2(source) => source,
            Self::Coincidence(source) => source,
            Self::Heralded(source) => source,
            Self::Vacuum(source) => source,
            Self::Overlap(source) => source,
            Self::SideMode(source) => source,
        }
    }

    /// The value of `source` in a document.
    pub fn source(&self) -> &'static str {
        match self {
            Self::Coherent(_) => "coherent",
            Self::Thermal(_) => "thermal",
            Self::G2(_) => "g2",
            Self::Coincidence(_) => "coincidence",
            Self::Heralded(_) => "heralded",
            Self::Vacuum(_) => "vacuum",
            Self::Overlap(_) => "overlap",
            Self::SideMode(_) => "side-mode",
        }
    }
}

/// A budget as it is written in a document; [`Budget`] is the validated form.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct BudgetDocument {
    /// Dimension of the whole carrier.
    pub carrier_dimension: u32,
    pub contributions: Vec<Contribution>,
}

impl BudgetDocument {
    /// The canonical bytes: compact JSON with the fields in the order of the types, defaults written out.
    pub fn canonical_json(&self) -> String {
        // Maps with string keys and finite numbers: serialisation cannot fail.
        serde_json::to_string(self).unwrap_or_default()
    }

    /// `sha256:` and the digest of the canonical bytes, in lower-case hexadecimal.
    pub fn digest(&self) -> String {
        format!("sha256:{}", hex::encode(Sha256::digest(self.canonical_json())))
    }
}

/// A valid budget with its figures.
#[derive(Debug, Clone, PartialEq)]
pub struct Budget {
    document: BudgetDocument,
    estimates: Vec<Estimate>,
}

impl TryFrom<BudgetDocument> for Budget {
    type Error = Fault;

    fn try_from(document: BudgetDocument) -> Result<Self, Fault> {
        let BudgetDocument { carrier_dimension, contributions } = &document;
        if !(1..=MAX_CARRIER_DIMENSION).contains(carrier_dimension) {
            let detail = format!("must be from 1 to {MAX_CARRIER_DIMENSION}, is {carrier_dimension}");
            return Err(Fault::new("/carrier_dimension", detail));
        }
        if contributions.is_empty() || contributions.len() > MAX_CONTRIBUTIONS {
            let detail = format!("needs from 1 to {MAX_CONTRIBUTIONS} contributions, has {}", contributions.len());
            return Err(Fault::new("/contributions", detail));
        }
        let estimate = |(i, contribution): (usize, &Contribution)| {
            contribution.calculator().estimate(*carrier_dimension).map_err(|fault| fault.under(&format!("/contributions/{i}")))
        };
        let estimates = contributions.iter().enumerate().map(estimate).collect::<Result<Vec<_>, _>>()?;
        let product = estimates.iter().fold(1u64, |product, estimate| product.saturating_mul(u64::from(estimate.levels)));
        if product != u64::from(*carrier_dimension) {
            let factors: Vec<String> =
                contributions.iter().zip(&estimates).map(|(c, estimate)| format!("{} {}", c.source(), estimate.levels)).collect();
            let detail = format!(
                "is {carrier_dimension}, but the carriers of the contributions multiply to {product} ({}); coherent and thermal light can \
                 state its own \"levels\"",
                factors.join(", ")
            );
            return Err(Fault::new("/carrier_dimension", detail));
        }
        Ok(Self { document, estimates })
    }
}

/// A budget's figures, with what they rest on.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct BudgetReport {
    /// Weight outside the carrier, in `[0, 1]`, rounded up.
    pub leakage: f64,
    /// The strongest reading for which the figure may be used.
    pub leakage_holds: LeakageReading,
    /// Probability that any limit is violated, rounded up.
    pub failure: f64,
    pub carrier_dimension: u32,
    pub contributions: Vec<ContributionReport>,
    /// What the sum rests on, in words, besides the assumptions of the contributions.
    pub assumptions: Vec<String>,
    /// What the figure may be used for, in words.
    pub reading: String,
    /// The document that the figures were computed from.
    pub budget: BudgetDocument,
    /// `sha256:` digest of the budget document's canonical bytes.
    pub digest: String,
}

/// One term of a budget.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ContributionReport {
    pub source: String,
    /// Weight outside this contribution's carrier, rounded up.
    pub leakage: f64,
    /// Part of the sum of all contributions, in `[0, 1]`, to nearest; 0 if the sum is.
    pub share: f64,
    /// Probability that a limit of this contribution is violated, rounded up.
    pub failure: f64,
    /// Dimension of this contribution's own carrier.
    pub levels: u32,
    pub leakage_holds: LeakageReading,
    pub inputs: Vec<Input>,
    pub assumptions: Vec<String>,
}

/// What a record says of the budget that its leakage comes from. All of it follows from the budget document.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct BudgetAccount {
    /// `sha256:` digest of the budget document's canonical bytes.
    pub digest: String,
    /// Weight outside the carrier, in `[0, 1]`, rounded up: the leakage of every preparation.
    pub leakage: f64,
    /// The strongest reading for which the figure may be used.
    pub leakage_holds: LeakageReading,
    /// Probability that any limit is violated, rounded up.
    pub failure: f64,
    pub contributions: Vec<AccountedContribution>,
}

/// One term of a budget, in a record.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct AccountedContribution {
    pub source: String,
    /// Weight outside this contribution's carrier, rounded up.
    pub leakage: f64,
    /// Part of the sum of all contributions, in `[0, 1]`, to nearest; 0 if the sum is.
    pub share: f64,
    /// Probability that a limit of this contribution is violated, rounded up.
    pub failure: f64,
}

impl Budget {
    pub fn document(&self) -> &BudgetDocument {
        &self.document
    }

    /// `min(1, Σ ε_i)`, rounded up.
    pub fn leakage(&self) -> f64 {
        exact_weight_up(&self.sum())
    }

    /// Probability that any limit is violated: the sum of all failure probabilities, rounded up, at most 1.
    pub fn failure(&self) -> f64 {
        exact_weight_up(&self.estimates.iter().map(failures).sum())
    }

    /// The strongest reading for which the figure may be used: every emission only if every contribution holds for every emission.
    pub fn holds(&self) -> LeakageReading {
        if self.estimates.iter().all(|estimate| estimate.holds == LeakageReading::EveryEmission) {
            LeakageReading::EveryEmission
        } else {
            LeakageReading::OnAverage
        }
    }

    /// Digest of the document, by which a record can refer to the budget.
    pub fn digest(&self) -> String {
        self.document.digest()
    }

    pub fn report(&self) -> BudgetReport {
        let sum = self.sum();
        let contributions = self.document.contributions.iter().zip(&self.estimates);
        BudgetReport {
            leakage: self.leakage(),
            leakage_holds: self.holds(),
            failure: self.failure(),
            carrier_dimension: self.document.carrier_dimension,
            contributions: contributions.map(|(contribution, estimate)| entry(contribution, estimate, &sum)).collect(),
            assumptions: self.assumptions(),
            reading: self.reading(),
            budget: self.document.clone(),
            digest: self.digest(),
        }
    }

    pub fn account(&self) -> BudgetAccount {
        let BudgetReport { leakage, leakage_holds, failure, contributions, digest, .. } = self.report();
        let accounted = |term: ContributionReport| {
            let ContributionReport { source, leakage, share, failure, .. } = term;
            AccountedContribution { source, leakage, share, failure }
        };
        BudgetAccount { digest, leakage, leakage_holds, failure, contributions: contributions.into_iter().map(accounted).collect() }
    }

    /// What the figure rests on, as sentences of a record, once each.
    pub fn sentences(&self) -> Vec<String> {
        let of_sum = self.assumptions().into_iter().map(|assumption| format!("Leakage budget: {assumption}."));
        let terms = self.document.contributions.iter().zip(&self.estimates);
        let of_terms =
            terms.flat_map(|(term, estimate)| estimate.assumptions.iter().map(|a| format!("Leakage budget, {}: {a}.", term.source())));
        let mut sentences: Vec<String> = Vec::new();
        for sentence in of_sum.chain(of_terms) {
            if !sentences.contains(&sentence) {
                sentences.push(sentence);
            }
        }
        sentences
    }

    fn sum(&self) -> BigRational {
        self.estimates.iter().map(|estimate| decimal(estimate.leakage)).sum()
    }

    fn assumptions(&self) -> Vec<String> {
        let mut assumptions = vec![
            "the contributions are all there are: nothing else leaves the sender".to_owned(),
            "the figures hold for every preparation, and for the batch that they are used for".to_owned(),
        ];
        if self.estimates.len() > 1 {
            assumptions.push("each contribution has its own factor of the carrier, and the carrier is their product".to_owned());
        }
        assumptions
    }

    /// What the figure may be used for, in words.
    pub fn reading(&self) -> String {
        match self.holds() {
            LeakageReading::EveryEmission => {
                "The figure bounds the weight outside the carrier of every pure state that is emitted, and so the mean as well: it may be used \
                 with either reading of the leakage."
                    .to_owned()
            }
            LeakageReading::OnAverage => {
                let pairs = self.document.contributions.iter().zip(&self.estimates);
                let mut sources: Vec<&str> =
                    pairs.filter(|(_, estimate)| estimate.holds == LeakageReading::OnAverage).map(|(c, _)| c.source()).collect();
                sources.dedup();
                format!(
                    "The figure bounds the mean weight outside the carrier and may be used on average only, not for every emission: a mixed \
                     state has pure components that leak more than the mixture ({}).",
                    sources.join(", ")
                )
            }
        }
    }
}

fn failures(estimate: &Estimate) -> BigRational {
    estimate.inputs.iter().filter_map(|input| input.failure).map(decimal).sum()
}

fn entry(contribution: &Contribution, estimate: &Estimate, sum: &BigRational) -> ContributionReport {
    let share = if sum.is_zero() { 0.0 } else { (decimal(estimate.leakage) / sum).to_f64().unwrap_or(0.0) };
    ContributionReport {
        source: contribution.source().to_owned(),
        leakage: estimate.leakage,
        share,
        failure: exact_weight_up(&failures(estimate)),
        levels: estimate.levels,
        leakage_holds: estimate.holds,
        inputs: estimate.inputs.clone(),
        assumptions: estimate.assumptions.clone(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::{exact::round_up, fault};

    fn budget(text: &str) -> Result<Budget, Fault> {
        Budget::try_from(fault::parse::<BudgetDocument>(text.as_bytes())?)
    }

    fn fault_of(text: &str) -> Fault {
        budget(text).unwrap_err()
    }

    const MIXED: &str = r#"{
        "carrier_dimension": 2,
        "contributions": [
            { "source": "coherent", "mean_photon_number":
                { "counts": 4000, "pulses": 100000, "efficiency": 0.5, "detector": "threshold", "failure": 1e-10 } },
            { "source": "side-mode", "weight": { "outside": 3, "trials": 4000000, "failure": 2e-10 } },
            { "source": "side-mode", "weight": 1e-5 }
        ]
    }"#;

    #[test]
    fn contributions_failures_and_shares_add_up() {
        let budget = budget(MIXED).unwrap();
        let report = budget.report();
        let sum: BigRational = report.contributions.iter().map(|term| decimal(term.leakage)).sum();
        assert!(decimal(report.leakage) >= sum);
        assert!(report.leakage <= round_up(&sum));
        assert_eq!(report.failure, 3e-10);
        assert_eq!(report.contributions.iter().map(|term| term.failure).collect::<Vec<_>>(), [1e-10, 2e-10, 0.0]);
        let shares: f64 = report.contributions.iter().map(|term| term.share).sum();
        assert!((shares - 1.0).abs() < 1e-12);
        assert!((report.contributions[2].share - 1e-5 / report.leakage).abs() < 1e-12);
        // The limit of μ from 4 % of clicks at efficiency 1/2 is a little above 0.0816.
        let mean = report.contributions[0].inputs[0].value;
        assert!(mean > 0.0816 && mean < 0.092, "{mean}");
        assert_eq!(report.contributions[0].leakage, super::super::coherent::leakage(mean, 2));
        assert!(report.contributions.iter().all(|term| !term.assumptions.is_empty() && !term.inputs.is_empty()));
        assert_eq!(report.assumptions.len(), 3);
    }

    #[test]
    fn documents_and_reports_survive_the_wire_and_keep_their_digest() {
        let first = budget(MIXED).unwrap();
        let again = budget(&first.document().canonical_json()).unwrap();
        assert_eq!(first, again);
        assert_eq!(first.digest(), again.digest());
        let report = first.report();
        let text = serde_json::to_string(&report).unwrap();
        assert_eq!(fault::parse::<BudgetReport>(text.as_bytes()).unwrap(), report);
        // Another document has another digest; the same one with its defaults written out has the same.
        let short = budget(r#"{"carrier_dimension":2,"contributions":[{"source":"coherent","mean_photon_number":1}]}"#).unwrap();
        let long = budget(
            r#"{"contributions":[{"phase":"random","mean_photon_number":1.0,"intensity_spread":0,"source":"coherent"}],"carrier_dimension":2}"#,
        )
        .unwrap();
        assert_eq!(short.digest(), long.digest());
        assert_ne!(short.digest(), first.digest());
        assert!(short.digest().starts_with("sha256:") && short.digest().len() == 71);
    }

    #[test]
    fn every_source_has_its_name_and_reads_back() {
        let contributions = [
            r#"{"source":"coherent","mean_photon_number":0.1,"levels":2,"phase":"fixed"}"#,
            r#"{"source":"thermal","mean_photon_number":0.1,"levels":3,"intensity_spread":0.01}"#,
            r#"{"source":"g2","g2":0.02,"mean_photon_number":0.05}"#,
            r#"{"source":"g2","g2":{"pulses":1000,"coincidences":2,"singles":[100,90],"failure":0.01},"mean_photon_number":0.2}"#,
            r#"{"source":"coincidence","pulses":1000,"coincidences":2,"efficiencies":[0.3,0.3],"failure":0.01}"#,
            r#"{"source":"heralded","pairs":"thermal","mean_pairs":0.1,"herald_efficiency":0.3}"#,
            r#"{"source":"heralded","pairs":"poissonian","mean_pairs":{"heralds":5,"pulses":1000,"failure":0.01},"herald_efficiency":0.3}"#,
            r#"{"source":"vacuum","mean_photon_number":0.01,"holds":"every-emission"}"#,
            r#"{"source":"overlap","overlap":0.999}"#,
            r#"{"source":"overlap","overlap":{"outside":1,"trials":1000,"failure":0.01}}"#,
            r#"{"source":"side-mode","weight":0.001}"#,
        ];
        for text in contributions {
            let contribution: Contribution = fault::parse(text.as_bytes()).unwrap();
            let again: Contribution = fault::parse(serde_json::to_string(&contribution).unwrap().as_bytes()).unwrap();
            assert_eq!(contribution, again);
            assert!(text.starts_with(&format!(r#"{{"source":"{}""#, contribution.source())), "{text}");
            let levels = contribution.calculator().estimate(1).unwrap().levels;
            let alone = budget(&format!(r#"{{"carrier_dimension":{levels},"contributions":[{text}]}}"#)).unwrap();
            assert!(alone.leakage() > 0.0 && alone.leakage() < 0.5, "{text}: {}", alone.leakage());
        }
    }

    #[test]
    fn dimensions_multiply() {
        let two = r#"{"source":"coherent","mean_photon_number":0.1,"levels":2},{"source":"heralded","pairs":"thermal","mean_pairs":0.01,"herald_efficiency":0.5}"#;
        let whole = budget(&format!(r#"{{"carrier_dimension":4,"contributions":[{two}]}}"#)).unwrap();
        assert_eq!(whole.report().contributions.iter().map(|term| term.levels).collect::<Vec<_>>(), [2, 2]);
        for dimension in [1, 2, 3, 8] {
            let fault = fault_of(&format!(r#"{{"carrier_dimension":{dimension},"contributions":[{two}]}}"#));
            assert_eq!(fault.pointer, "/carrier_dimension");
            assert!(fault.detail.contains("multiply to 4 (coherent 2, heralded 2)"), "{fault}");
        }
        // Calculators for d = 1 or 2 are refused elsewhere.
        for (source, dimension) in [
            (r#"{"source":"g2","g2":0.02,"mean_photon_number":0.05}"#, 3),
            (r#"{"source":"overlap","overlap":0.9}"#, 2),
            (r#"{"source":"vacuum","mean_photon_number":0.01}"#, 2),
        ] {
            let fault = fault_of(&format!(r#"{{"carrier_dimension":{dimension},"contributions":[{source}]}}"#));
            assert_eq!(fault.pointer, "/carrier_dimension");
        }
    }

    #[test]
    fn every_emission_only_if_every_contribution_allows_it() {
        let pure = r#"{"source":"coherent","mean_photon_number":0.1,"phase":"fixed"},{"source":"side-mode","weight":0.001,"holds":"every-emission"}"#;
        let whole = budget(&format!(r#"{{"carrier_dimension":2,"contributions":[{pure}]}}"#)).unwrap();
        assert_eq!(whole.holds(), LeakageReading::EveryEmission);
        assert!(whole.report().reading.contains("either reading"));
        let mixed = format!(r#"{{"carrier_dimension":2,"contributions":[{pure},{{"source":"side-mode","weight":0.001}}]}}"#);
        let whole = budget(&mixed).unwrap();
        assert_eq!(whole.holds(), LeakageReading::OnAverage);
        assert!(whole.report().reading.contains("on average only") && whole.report().reading.contains("side-mode"));
        for random in [
            r#"{"source":"coherent","mean_photon_number":0.1}"#,
            r#"{"source":"thermal","mean_photon_number":0.1}"#,
            r#"{"source":"g2","g2":0.02,"mean_photon_number":0.05}"#,
            r#"{"source":"coincidence","pulses":1000,"coincidences":2,"efficiencies":[0.3,0.3],"failure":0.01}"#,
            r#"{"source":"heralded","pairs":"thermal","mean_pairs":0.1,"herald_efficiency":0.3}"#,
            r#"{"source":"heralded","pairs":"poissonian","mean_pairs":0.1,"herald_efficiency":0.3}"#,
        ] {
            let whole = budget(&format!(r#"{{"carrier_dimension":2,"contributions":[{random}]}}"#)).unwrap();
            assert_eq!(whole.holds(), LeakageReading::OnAverage, "{random}");
        }
    }

    #[test]
    fn sums_stop_at_one() {
        let text = r#"{"carrier_dimension":1,"contributions":[{"source":"side-mode","weight":0.7},{"source":"side-mode","weight":{"outside":5,"trials":5,"failure":0.5}},
            {"source":"side-mode","weight":{"outside":5,"trials":5,"failure":0.5}},{"source":"side-mode","weight":{"outside":5,"trials":5,"failure":0.5}}]}"#;
        let whole = budget(text).unwrap();
        assert_eq!((whole.leakage(), whole.failure()), (1.0, 1.0));
        let nothing = budget(r#"{"carrier_dimension":1,"contributions":[{"source":"side-mode","weight":0}]}"#).unwrap();
        assert_eq!((nothing.leakage(), nothing.report().contributions[0].share), (0.0, 0.0));
    }

    #[test]
    fn wrong_documents_are_refused_with_their_place() {
        let with = |dimension: u32, contribution: &str| {
            fault_of(&format!(
                r#"{{"carrier_dimension":{dimension},"contributions":[{{"source":"side-mode","weight":0}},{contribution}]}}"#
            ))
        };
        let cases = [
            (2, r#"{"source":"coherent","mean_photon_number":-0.1}"#, "/contributions/1/mean_photon_number"),
            (2, r#"{"source":"coherent","mean_photon_number":0.1,"levels":0}"#, "/contributions/1/levels"),
            (0, r#"{"source":"coherent","mean_photon_number":0.1}"#, "/carrier_dimension"),
            (1025, r#"{"source":"coherent","mean_photon_number":0.1}"#, "/carrier_dimension"),
            (2, r#"{"source":"thermal","mean_photon_number":-1}"#, "/contributions/1/mean_photon_number"),
            (2, r#"{"source":"thermal","mean_photon_number":1,"intensity_spread":-1}"#, "/contributions/1/intensity_spread"),
            (
                2,
                r#"{"source":"coherent","mean_photon_number":{"counts":1,"pulses":10,"efficiency":1.2,"failure":0.01}}"#,
                "/contributions/1/mean_photon_number/efficiency",
            ),
            (
                2,
                r#"{"source":"coherent","mean_photon_number":{"counts":1,"pulses":10,"efficiency":1,"failure":0}}"#,
                "/contributions/1/mean_photon_number/failure",
            ),
            (
                2,
                r#"{"source":"heralded","pairs":"thermal","mean_pairs":0.1,"herald_efficiency":1.5}"#,
                "/contributions/1/herald_efficiency",
            ),
            (2, r#"{"source":"heralded","pairs":"thermal","mean_pairs":0.1,"herald_efficiency":0}"#, "/contributions/1/herald_efficiency"),
            (2, r#"{"source":"g2","g2":-1,"mean_photon_number":0.1}"#, "/contributions/1/g2"),
            (1, r#"{"source":"overlap","overlap":1.01}"#, "/contributions/1/overlap"),
            // Deviations from the shape are placed at the contribution, with the field in the detail.
            (2, r#"{"source":"g2","g2":0.02}"#, "/contributions/1"),
            (2, r#"{"source":"coherent","mean_photon_number":0.1,"power":3}"#, "/contributions/1"),
            (2, r#"{"source":"moonlight"}"#, "/contributions/1/source"),
            (2, r#"{"mean_photon_number":0.1}"#, "/contributions/1"),
        ];
        for (dimension, contribution, pointer) in cases {
            assert_eq!(with(dimension, contribution).pointer, pointer, "{contribution}");
        }
        assert!(with(2, r#"{"source":"g2","g2":0.02}"#).detail.contains("mean_photon_number"));
        assert!(with(2, r#"{"source":"coherent","mean_photon_number":0.1,"power":3}"#).detail.contains("power"));
        assert_eq!(fault_of(r#"{"carrier_dimension":2,"contributions":[]}"#).pointer, "/contributions");
    }
}
