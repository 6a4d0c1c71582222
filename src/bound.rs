//! From a question to a checked bound: pose, solve, round, check, and fall to a coarser level where that fails.

use nalgebra::DVector;
use num_rational::BigRational;
use num_traits::{One, Signed};

use crate::{
    counts::{Table, fits},
    relaxation::{
        cells::{Cut, cover},
        level::Level,
        moments::Moments,
        program::Row,
        question::{Knowledge, Question, Shape, Slack, pose},
        word::Algebra,
    },
    scenario::{Geometry, LeakageReading, Scenario, Setting},
    score::check_scores,
    solver::{Candidate, Limits, Status, solve_generally, solve_structured},
    witness::{
        check::{CheckedBound, CheckedWitness, Place, proves_contradiction},
        rounding,
        witness::Claim,
    },
};

/// A checked witness, the bound it gives where it was asked for, and the level it was found at.
#[derive(Debug, Clone, PartialEq)]
pub struct Found {
    pub witness: CheckedWitness,
    pub bound: CheckedBound,
    pub level: Level,
}

/// Proof that no model of the scenario has the numbers.
#[derive(Debug, Clone, PartialEq)]
pub struct Contradiction {
    pub found: Found,
    /// No smaller uniform leakage, read on average, explains the numbers; with the witness of that. `None` if not verified.
    pub least_leakage: Option<(BigRational, CheckedWitness)>,
}

/// The answer to a question about a target setting.
#[derive(Debug, Clone, PartialEq)]
pub enum Answer {
    Bounded(Box<Found>),
    Outside(Box<Contradiction>),
    /// No witness passed the exact check at any level.
    Unverified,
}

/// Upper bound on the guessing probability of a target of the scenario, for every model whose behaviour lies in the place.
///
/// Starts at `level` and falls to coarser ones where a solve does not end well; the least of the bounds that were checked is
/// returned.
pub fn guessing_probability(scenario: &Scenario, target: Setting, place: Place, level: Level, limits: Limits) -> Answer {
    let leakage = scenario.leakage();
    let question = Question {
        claim: Claim::Guess { target },
        knowledge: knowledge(place),
        leakage,
        leakage_holds: scenario.leakage_holds(),
        slack: Slack::None,
    };
    let mut best: Option<Found> = None;
    for level in descent(level) {
        let Attempt { status, found, .. } = attempt(scenario.geometry(), &question, place, level, limits);
        if status == Status::Infeasible
            && let Some(contradiction) = contradiction(scenario, place, level, limits)
        {
            return Answer::Outside(Box::new(contradiction));
        }
        if let Some(found) = found.as_ref().filter(|found| proves_contradiction(&found.witness, &found.bound, place)) {
            let least_leakage = least_leakage(scenario.geometry(), place, level, limits);
            return Answer::Outside(Box::new(Contradiction { found: found.clone(), least_leakage }));
        }
        let improves = |found: &Found| best.as_ref().is_none_or(|best| found.bound.exact() < best.bound.exact());
        best = found.filter(improves).or(best);
        if best.is_some() && status == Status::Solved {
            break;
        }
    }
    best.map_or(Answer::Unverified, |found| Answer::Bounded(Box::new(found)))
}

/// Upper bound on a linear score `Σ s p` with integer coefficients `[x][y][b]`, over all models of a geometry and leakage.
///
/// `None` if no witness passed the exact check.
pub fn score(scenario: &Scenario, coefficients: Table<i64>, level: Level, limits: Limits) -> Option<Found> {
    let claim = Claim::Score { coefficients };
    let Geometry { preparations, measurements, outcomes, .. } = scenario.geometry();
    let anywhere = vec![vec![vec![[0.0, 1.0]; outcomes]; measurements]; preparations];
    let question = Question {
        claim,
        knowledge: Knowledge::Nothing,
        leakage: scenario.leakage(),
        leakage_holds: scenario.leakage_holds(),
        slack: Slack::None,
    };
    descent(level).find_map(|level| attempt(scenario.geometry(), &question, Place::Region(&anywhere), level, limits).found)
}

/// Proof that no model of the scenario has a behaviour in the place, if there is one at this level.
pub fn contradiction(scenario: &Scenario, place: Place, level: Level, limits: Limits) -> Option<Contradiction> {
    let intervals = intervals(place);
    let question = Question {
        claim: Claim::Contradiction,
        knowledge: intervals.as_ref().map_or(knowledge(place), Knowledge::Within),
        leakage: scenario.leakage(),
        leakage_holds: scenario.leakage_holds(),
        slack: Slack::Behaviour,
    };
    let found = attempt(scenario.geometry(), &question, place, level, limits).found;
    let found = found.filter(|found| proves_contradiction(&found.witness, &found.bound, place))?;
    Some(Contradiction { found, least_leakage: least_leakage(scenario.geometry(), place, level, limits) })
}

fn least_leakage(geometry: Geometry, place: Place, level: Level, limits: Limits) -> Option<(BigRational, CheckedWitness)> {
    // Any leakage: no preparation may be taken as exactly leak-free.
    let anything = vec![1.0; geometry.preparations];
    let intervals = intervals(place);
    let question = Question {
        claim: Claim::Contradiction,
        knowledge: intervals.as_ref().map_or(knowledge(place), Knowledge::Within),
        leakage: &anything,
        leakage_holds: LeakageReading::OnAverage,
        slack: Slack::Leakage,
    };
    let witness = attempt(geometry, &question, place, level, limits).found?.witness;
    let least = witness.least_uniform_leakage(place).ok()??;
    (least.is_positive() && least <= BigRational::one()).then_some((least, witness))
}

/// One solve at one level: how it ended and what could be verified of it.
#[derive(Clone)]
struct Attempt {
    status: Status,
    found: Option<Found>,
    /// Minus the left-hand sides of the facet rows at the solver's point.
    facets: Vec<f64>,
}

fn attempt(geometry: Geometry, question: &Question, place: Place, level: Level, limits: Limits) -> Attempt {
    let exact: Vec<bool> = question.leakage.iter().map(|leakage| *leakage == 0.0).collect();
    let failed = Attempt { status: Status::Failed, found: None, facets: Vec::new() };
    if !is_about(question, geometry) {
        return failed;
    }
    let Ok(mut moments) = Moments::new(Algebra::new(geometry, &exact), level) else { return failed };
    let Ok(posed) = pose(&mut moments, question) else { return failed };
    let examined = |candidate: Candidate| {
        let at_point = |row: &Row| -row.terms.iter().filter_map(|(variable, c)| Some(c * candidate.values.get(*variable)?)).sum::<f64>();
        let facets = posed.program.inequalities.iter().skip(posed.facet_rows).map(at_point).collect();
        let found = rounding::witness(&moments, question, &posed, &candidate).ok().and_then(|witness| {
            let bound = witness.bound(place, question.leakage, question.leakage_holds).ok()?;
            Some(Found { witness, bound, level })
        });
        Attempt { status: candidate.status, found, facets }
    };
    let first = solve_structured(&posed.program, limits).map(examined);
    if let Some(first) = first.as_ref().filter(|first| first.is_good()) {
        return first.clone();
    }
    let second = examined(solve_generally(&posed.program, limits));
    match first {
        Some(first) if first.value().is_some_and(|value| second.value().is_none_or(|other| value <= other)) => first,
        Some(_) | None => second,
    }
}

impl Attempt {
    /// Whether another solver is not worth asking.
    fn is_good(&self) -> bool {
        self.status == Status::Solved && self.found.is_some()
    }

    fn value(&self) -> Option<&BigRational> {
        self.found.as_ref().map(|found| found.bound.exact())
    }
}

/// Whether everything in a question has the shape of the geometry; one that has not is left unanswered.
fn is_about(question: &Question, geometry: Geometry) -> bool {
    let known = match question.knowledge {
        Knowledge::Nothing => true,
        Knowledge::Exactly(table) => fits(table, geometry),
        Knowledge::Within(table) => fits(table, geometry),
        Knowledge::Reaching(scores) => check_scores(scores, geometry).is_ok(),
    };
    let claimed = match &question.claim {
        Claim::Guess { target } | Claim::Power { target, .. } => target.x < geometry.preparations && target.y < geometry.measurements,
        Claim::Score { coefficients } => fits(coefficients, geometry),
        Claim::Contradiction => true,
    };
    known && claimed && question.leakage.len() == geometry.preparations
}

fn knowledge(place: Place<'_>) -> Knowledge<'_> {
    match place {
        Place::Behaviour(table) => Knowledge::Exactly(table),
        Place::Region(table) => Knowledge::Within(table),
        Place::Scores(scores) => Knowledge::Reaching(scores),
    }
}

/// The place as intervals, of no width for a behaviour; `None` for scores.
fn intervals(place: Place) -> Option<Table<[f64; 2]>> {
    match place {
        Place::Behaviour(table) => {
            Some(table.iter().map(|t| t.iter().map(|values| values.iter().map(|p| [*p, *p]).collect()).collect()).collect())
        }
        Place::Region(table) => Some(table.clone()),
        Place::Scores(_) => None,
    }
}

fn descent(level: Level) -> impl Iterator<Item = Level> {
    std::iter::successors(Some(level), |level| level.coarser())
}

/// What chords may give away, in nats, before the cover is made anew: less than a thousandth of a bit.
const CHORD_GAP: f64 = 5e-4;
/// Covers that are tried.
const COVERS: usize = 5;

/// Lower bound on the mean of `η_β` over the outcomes of a target, as an upper bound on its negative, for every model whose behaviour lies
/// in the place. `power` is `β` in units of `2^-30`.
///
/// An optimal adversary mixes few distributions of the target's outcome, and a chord gives nothing away at the vertices of its cell. So
/// the cover is made with vertices where the last solve put weight, until what chords give away is small. `None` if no witness
/// passed the exact check.
pub fn power_entropy(scenario: &Scenario, target: Setting, place: Place, power: u32, level: Level, limits: Limits) -> Option<Found> {
    let outcomes = scenario.geometry().outcomes;
    let mut wanted = first_vertices(&expected(place, target, outcomes));
    let mut cuts = cover(outcomes, &wanted);
    let mut best: Option<Found> = None;
    for _ in 0..COVERS {
        let claim = Claim::Power { target, power, cuts };
        let Attempt { found, facets, .. } = power_attempt(scenario, claim.clone(), place, level, limits);
        let (gap, vertices) = spread(&claim, outcomes, &facets);
        let improves = |found: &Found| best.as_ref().is_none_or(|best| found.bound.exact() < best.bound.exact());
        best = found.filter(improves).or(best);
        if gap <= CHORD_GAP {
            break;
        }
        wanted.extend(vertices);
        cuts = cover(outcomes, &wanted);
    }
    best
}

/// The same with a given cover of the distributions of the target's outcome, in one solve.
pub fn power_entropy_in(
    scenario: &Scenario,
    target: Setting,
    place: Place,
    power: u32,
    cuts: Vec<Option<Cut>>,
    level: Level,
    limits: Limits,
) -> Option<Found> {
    power_attempt(scenario, Claim::Power { target, power, cuts }, place, level, limits).found
}

fn power_attempt(scenario: &Scenario, claim: Claim, place: Place, level: Level, limits: Limits) -> Attempt {
    let question = Question {
        claim,
        knowledge: knowledge(place),
        leakage: scenario.leakage(),
        leakage_holds: scenario.leakage_holds(),
        slack: Slack::None,
    };
    attempt(scenario.geometry(), &question, place, level, limits)
}

/// The distribution of a target's outcome that a place suggests; without any, the uniform one.
fn expected(place: Place, target: Setting, outcomes: usize) -> DVector<f64> {
    let values: Option<Vec<f64>> = match place {
        Place::Behaviour(table) => table.get(target.x).and_then(|t| t.get(target.y)).cloned(),
        Place::Region(table) => {
            let intervals = table.get(target.x).and_then(|t| t.get(target.y));
            intervals.map(|intervals| intervals.iter().map(|[low, high]| 0.5 * (low + high)).collect())
        }
        Place::Scores(_) => None,
    };
    let values =
        values.filter(|values| values.len() == outcomes && values.iter().sum::<f64>() > 0.0).unwrap_or_else(|| vec![1.0; outcomes]);
    let sum: f64 = values.iter().sum();
    DVector::from_vec(values) / sum
}

/// Where weight is to be expected before anything was solved: a little more certain than the observed distribution, and almost certain.
fn first_vertices(expected: &DVector<f64>) -> Vec<DVector<f64>> {
    let certain = |b: usize| DVector::from_fn(expected.len(), |other, _| f64::from(u8::from(other == b)));
    let towards = |b: usize, share: f64| expected * (1.0 - share) + certain(b) * share;
    let likely = expected.imax();
    let others = (0..expected.len()).filter(|b| *b != likely);
    let others = others.flat_map(|b| [towards(b, 0.97), towards(b, 0.4), towards(b, 0.1)]);
    [towards(likely, 0.0), towards(likely, 0.2), towards(likely, 0.5)].into_iter().chain(others).collect()
}

/// What the chords give away at the solver's point, in nats, and the vertices of the next cover: where weight lies, and the vertices of
/// the cells that carry it.
fn spread(claim: &Claim, outcomes: usize, facets: &[f64]) -> (f64, Vec<DVector<f64>>) {
    let Claim::Power { power, .. } = claim else { return (0.0, Vec::new()) };
    let (mut gap, mut vertices) = (0.0, Vec::new());
    for (shape, coordinates) in Shape::of(claim, outcomes).iter().zip(facets.chunks_exact(outcomes)) {
        // The barycentric coordinates times the weight of the group.
        let coordinates = DVector::from_iterator(outcomes, coordinates.iter().map(|value| value.max(0.0)));
        let weight = coordinates.sum();
        if weight < 1e-4 {
            continue;
        }
        let coordinates = coordinates / weight;
        let lost = weight * (shape.value_at(&coordinates, *power) - shape.values(*power).dot(&coordinates));
        gap += lost;
        if lost > CHORD_GAP / 10.0 {
            vertices.push(shape.distribution(&coordinates));
        }
    }
    (gap, vertices)
}
