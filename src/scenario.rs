//! The geometry of an experiment and what is admitted about its carrier, validated once.

use serde::{Deserialize, Deserializer, Serialize, Serializer, de};

use crate::{
    fault::Fault,
    leakage::budget::{Budget, BudgetDocument},
};

/// Most preparations, measurements and outcomes a scenario may have.
pub const MAX_PREPARATIONS: usize = 32;
pub const MAX_MEASUREMENTS: usize = 8;
pub const MAX_OUTCOMES: usize = 8;
/// Largest carrier dimension. It enters the relaxation as a number only; beyond this the constraint is vacuous.
pub const MAX_CARRIER_DIMENSION: u32 = 1024;

/// One combination of settings: preparation `x` with measurement `y`. On the wire a pair `[x, y]`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct Setting {
    pub x: usize,
    pub y: usize,
}

impl Serialize for Setting {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        (self.x, self.y).serialize(serializer)
    }
}

impl<'de> Deserialize<'de> for Setting {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let (x, y) = Deserialize::deserialize(deserializer)?;
        Ok(Self { x, y })
    }
}

/// How the leakage tolerance is meant.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum LeakageReading {
    /// The mean weight outside the carrier, over everything classical, is at most `ε_x`.
    #[default]
    OnAverage,
    /// Each pure state that is emitted, given everything classical, has at most `ε_x` outside the carrier.
    EveryEmission,
}

/// Largest failure probability of a budget that a leakage may come from: as for any other failure probability that a poster accepts.
const MAX_BUDGET_FAILURE: f64 = 0.5;

/// The leakage of a document: one number for all preparations, one per preparation, or the budget that it comes from.
#[derive(Debug, Clone, PartialEq)]
pub enum LeakageDocument {
    Uniform(f64),
    PerPreparation(Vec<f64>),
    /// A budget, whose figure holds for every preparation.
    Budget(Box<BudgetDocument>),
    /// `sha256:` digest of a budget that a service keeps, which puts the budget in its place.
    Stored(String),
}

impl Serialize for LeakageDocument {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        match self {
            Self::Uniform(value) => value.serialize(serializer),
            Self::PerPreparation(values) => values.serialize(serializer),
            Self::Budget(budget) => budget.serialize(serializer),
            Self::Stored(digest) => digest.serialize(serializer),
        }
    }
}

impl<'de> Deserialize<'de> for LeakageDocument {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct Visitor;
        impl<'de> de::Visitor<'de> for Visitor {
            type Value = LeakageDocument;
            fn expecting(&self, formatter: &mut std::fmt::Formatter) -> std::fmt::Result {
                formatter.write_str("a number, one number per preparation, a leakage budget, or the digest of a stored one")
            }
            fn visit_f64<E: de::Error>(self, value: f64) -> Result<Self::Value, E> {
                Ok(LeakageDocument::Uniform(value))
            }
            fn visit_u64<E: de::Error>(self, value: u64) -> Result<Self::Value, E> {
                Ok(LeakageDocument::Uniform(value as f64))
            }
            fn visit_i64<E: de::Error>(self, value: i64) -> Result<Self::Value, E> {
                Ok(LeakageDocument::Uniform(value as f64))
            }
            fn visit_seq<A: de::SeqAccess<'de>>(self, mut items: A) -> Result<Self::Value, A::Error> {
                let mut values = Vec::new();
                while let Some(value) = items.next_element()? {
                    values.push(value);
                }
                Ok(LeakageDocument::PerPreparation(values))
            }
            fn visit_map<A: de::MapAccess<'de>>(self, members: A) -> Result<Self::Value, A::Error> {
                let budget = BudgetDocument::deserialize(de::value::MapAccessDeserializer::new(members))?;
                Ok(LeakageDocument::Budget(Box::new(budget)))
            }
            fn visit_str<E: de::Error>(self, text: &str) -> Result<Self::Value, E> {
                let hexadecimal = |rest: &str| rest.len() == 64 && rest.bytes().all(|byte| matches!(byte, b'0'..=b'9' | b'a'..=b'f'));
                if text.strip_prefix("sha256:").is_some_and(hexadecimal) {
                    return Ok(LeakageDocument::Stored(text.to_owned()));
                }
                Err(E::custom("a stored budget is named by its digest: sha256: and 64 hexadecimal digits in lower case"))
            }
        }
        deserializer.deserialize_any(Visitor)
    }
}

/// A scenario as it is written in a document; [`Scenario`] is the validated form.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema), schema(as = Scenario, description = "Sizes, leakage and target settings."))]
#[serde(deny_unknown_fields)]
pub struct ScenarioDocument {
    pub preparations: usize,
    pub measurements: usize,
    pub outcomes: usize,
    pub carrier_dimension: u32,
    pub leakage: LeakageDocument,
    #[serde(default)]
    pub leakage_holds: LeakageReading,
    #[cfg_attr(feature = "service", schema(value_type = Vec<Vec<usize>>))]
    pub targets: Vec<Setting>,
}

/// Sizes of an experiment and its carrier: `X` preparations, `Y` measurements, `B` outcomes, dimension `d`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Geometry {
    pub preparations: usize,
    pub measurements: usize,
    pub outcomes: usize,
    pub carrier_dimension: u32,
}

impl Geometry {
    /// # Errors
    /// The first size that is out of its range.
    pub fn check(&self) -> Result<(), Fault> {
        let within = |value: usize, low: usize, high: usize, name: &str| {
            if (low..=high).contains(&value) {
                Ok(())
            } else {
                Err(Fault::new(format!("/{name}"), format!("must be from {low} to {high}, is {value}")))
            }
        };
        within(self.preparations, 1, MAX_PREPARATIONS, "preparations")?;
        within(self.measurements, 1, MAX_MEASUREMENTS, "measurements")?;
        within(self.outcomes, 2, MAX_OUTCOMES, "outcomes")?;
        within(self.carrier_dimension as usize, 1, MAX_CARRIER_DIMENSION as usize, "carrier_dimension")
    }

    /// All settings, preparations outermost.
    pub fn settings(&self) -> impl Iterator<Item = Setting> + use<> {
        let (preparations, measurements) = (self.preparations, self.measurements);
        (0..preparations).flat_map(move |x| (0..measurements).map(move |y| Setting { x, y }))
    }
}

/// A valid scenario. Impossible to hold out-of-range sizes, leakages or targets.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(into = "ScenarioDocument", try_from = "ScenarioDocument")]
pub struct Scenario {
    geometry: Geometry,
    leakage: Vec<f64>,
    /// What the leakage comes from, if it is not stated.
    budget: Option<Box<Budget>>,
    leakage_holds: LeakageReading,
    targets: Vec<Setting>,
}

impl TryFrom<ScenarioDocument> for Scenario {
    type Error = Fault;

    fn try_from(document: ScenarioDocument) -> Result<Self, Fault> {
        let ScenarioDocument { preparations, measurements, outcomes, carrier_dimension, leakage, leakage_holds, targets } = document;
        let geometry = Geometry { preparations, measurements, outcomes, carrier_dimension };
        geometry.check()?;
        let (leakage, budget) = validated_leakage(leakage, geometry, leakage_holds)?;
        if targets.is_empty() {
            return Err(Fault::new("/targets", "at least one target setting is needed"));
        }
        for (i, target) in targets.iter().enumerate() {
            if target.x >= preparations {
                let detail = format!("there is no preparation {}; they are numbered from 0 to {}", target.x, preparations - 1);
                return Err(Fault::new(format!("/targets/{i}/0"), detail));
            }
            if target.y >= measurements {
                let detail = format!("there is no measurement {}; they are numbered from 0 to {}", target.y, measurements - 1);
                return Err(Fault::new(format!("/targets/{i}/1"), detail));
            }
            if targets[..i].contains(target) {
                return Err(Fault::new(format!("/targets/{i}"), "this target setting is listed twice"));
            }
        }
        Ok(Self { geometry, leakage, budget, leakage_holds, targets })
    }
}

/// The tolerance of each preparation, and the budget that it comes from.
fn validated_leakage(
    document: LeakageDocument,
    geometry: Geometry,
    leakage_holds: LeakageReading,
) -> Result<(Vec<f64>, Option<Box<Budget>>), Fault> {
    let preparations = geometry.preparations;
    let in_range = |value: f64, pointer: String| {
        if (0.0..=1.0).contains(&value) {
            // Adding positive zero turns -0.0 into 0.0, so that "exactly zero" has one representation.
            Ok(value + 0.0)
        } else {
            Err(Fault::new(pointer, format!("a leakage is a weight from 0 to 1, is {value}")))
        }
    };
    let stated = match document {
        LeakageDocument::Uniform(value) => Ok(vec![in_range(value, "/leakage".into())?; preparations]),
        LeakageDocument::PerPreparation(values) => {
            if values.len() != preparations {
                let detail = format!("needs one leakage per preparation: {preparations}, has {}", values.len());
                return Err(Fault::new("/leakage", detail));
            }
            values.into_iter().enumerate().map(|(x, value)| in_range(value, format!("/leakage/{x}"))).collect()
        }
        LeakageDocument::Budget(budget) => {
            let budget = fitting_budget(*budget, geometry, leakage_holds)?;
            return Ok((vec![budget.leakage(); preparations], Some(Box::new(budget))));
        }
        LeakageDocument::Stored(digest) => {
            let detail = format!("{digest} stands for a budget that is not at hand: give the budget itself in its place");
            Err(Fault::new("/leakage", detail))
        }
    };
    Ok((stated?, None))
}

/// A budget for this carrier and this reading.
fn fitting_budget(document: BudgetDocument, geometry: Geometry, leakage_holds: LeakageReading) -> Result<Budget, Fault> {
    let budget = Budget::try_from(document).map_err(|fault| fault.under("/leakage"))?;
    let dimension = budget.document().carrier_dimension;
    if dimension != geometry.carrier_dimension {
        let detail = format!("the budget is for a carrier of dimension {dimension}, the scenario has {}", geometry.carrier_dimension);
        return Err(Fault::new("/leakage", detail));
    }
    if leakage_holds == LeakageReading::EveryEmission && budget.holds() != leakage_holds {
        return Err(Fault::new("/leakage_holds", budget.reading()));
    }
    if budget.failure() > MAX_BUDGET_FAILURE {
        let detail = format!("the budget fails with a probability of {}; at most {MAX_BUDGET_FAILURE} is of any use", budget.failure());
        return Err(Fault::new("/leakage", detail));
    }
    Ok(budget)
}

impl From<Scenario> for ScenarioDocument {
    fn from(scenario: Scenario) -> Self {
        let Geometry { preparations, measurements, outcomes, carrier_dimension } = scenario.geometry;
        let uniform = scenario.leakage.iter().all(|value| *value == scenario.leakage[0]);
        Self {
            preparations,
            measurements,
            outcomes,
            carrier_dimension,
            leakage: match scenario.budget {
                Some(budget) => LeakageDocument::Budget(Box::new(budget.document().clone())),
                None if uniform => LeakageDocument::Uniform(scenario.leakage[0]),
                None => LeakageDocument::PerPreparation(scenario.leakage),
            },
            leakage_holds: scenario.leakage_holds,
            targets: scenario.targets,
        }
    }
}

impl Scenario {
    pub fn geometry(&self) -> Geometry {
        self.geometry
    }

    /// Leakage tolerance `ε_x` of each preparation, in `[0, 1]`.
    pub fn leakage(&self) -> &[f64] {
        &self.leakage
    }

    /// The budget that the leakage comes from, if it is not stated.
    pub fn leakage_budget(&self) -> Option<&Budget> {
        self.budget.as_deref()
    }

    pub fn leakage_holds(&self) -> LeakageReading {
        self.leakage_holds
    }

    /// The settings whose outcomes are kept as raw bits; never empty, no duplicates.
    pub fn targets(&self) -> &[Setting] {
        &self.targets
    }

    /// The same scenario with another leakage.
    ///
    /// # Errors
    /// A leakage outside `[0, 1]`, one whose number does not match the preparations, or a budget that is for something else. Pointers are
    /// into a document with the member `leakage`.
    pub fn with_leakage(self, leakage: LeakageDocument) -> Result<Self, Fault> {
        let (leakage, budget) = validated_leakage(leakage, self.geometry, self.leakage_holds).map_err(|fault| {
            // The reading is not the new leakage's to state.
            if fault.pointer == "/leakage_holds" { Fault::new("/leakage", fault.detail) } else { fault }
        })?;
        Ok(Self { leakage, budget, ..self })
    }
}
