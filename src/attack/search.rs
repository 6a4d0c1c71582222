//! Column generation: strategies are added until none is found that would improve the mixture.

use nalgebra::{Complex, QR};

use super::{
    attained::{Attained, attained},
    climb::{Confinement, Space},
    master::{Column, Constraints, Priced, Prices},
    numbers::Numbers,
    objective::{Objective, likeliest},
    strategy::{Matrix, Model, Part, Strategy, Vector},
};
use crate::{
    counts::{Table, fits},
    scenario::{Geometry, LeakageReading, Scenario, Setting},
    witness::check::{CheckedWitness, Place},
};

/// How hard to look. The result is the same for the same effort.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Effort {
    /// Most rounds of column generation.
    pub rounds: usize,
    /// Random starts in each round; ten times as many before giving up.
    pub starts: usize,
    /// Steps of one climb.
    pub steps: usize,
    /// Strategies that improve the mixture by less than this, per unit of weight, are not added.
    pub gain: f64,
    /// Most dimensions besides the carrier's, no more than there are leaking preparations.
    pub extra_dimensions: usize,
    pub seed: u64,
}

impl Default for Effort {
    fn default() -> Self {
        Self { rounds: 150, starts: 4, steps: 120, gain: 1e-7, extra_dimensions: 2, seed: 1 }
    }
}

/// An explicit model and what it attains.
#[derive(Debug, Clone, PartialEq)]
pub struct Attack {
    pub model: Model,
    pub attained: Attained,
    /// By how much the attained behaviour may miss the place, in any probability, errors of arithmetic included: zero if it lies inside.
    pub residual: f64,
    /// Rounds of column generation.
    pub rounds: usize,
    /// Whether the search ended because nothing better was found.
    pub settled: bool,
}

impl Attack {
    /// What is certainly attained: the guessing probability minus errors of arithmetic, rounded down.
    pub fn guessing_probability(&self) -> f64 {
        (self.attained.guessing_probability - self.attained.error).next_down().max(0.0)
    }
}

/// Leakage and intervals are tightened by this, so that errors of arithmetic do not carry the model across a limit.
const MARGIN: f64 = 1e-11;
/// First and largest distance of prices from their centre.
const HINTED_REACH: f64 = 0.25;
const BLIND_REACH: f64 = 4.0;
const LAST_REACH: f64 = 1e4;
/// Share of the prices before that is kept in those that strategies are looked for under.
const KEPT: f64 = 0.6;
/// An attack this close to the largest value that the objective has is not looked beyond.
const FULL: f64 = 1e-10;
/// How many times more random starts are made before nothing better is taken to exist.
const LAST_STARTS: usize = 10;
/// Columns added in one round.
const ADDED: usize = 12;
/// Columns climbed from in one round.
const CLIMBED: usize = 24;
/// Those are all of different kinds: some probability differs by more than this.
const KIND: f64 = 3e-3;
/// Columns whose behaviour differs by less than this everywhere are the same.
const SAME: f64 = 1e-8;

/// What may shorten the search. Nothing that is found rests on it.
#[derive(Debug, Clone, Copy, Default)]
pub struct Hints<'a> {
    /// A witness of the bound, whose multipliers are close to the best prices.
    pub witness: Option<&'a CheckedWitness>,
    /// Strategies to be tried as they are, if they have the dimensions of the search.
    pub known: &'a [Strategy],
}

/// The best explicit attack found on a target of a scenario whose behaviour lies in the place.
///
/// `None` if the place does not fit the scenario, if nothing was found that obeys the leakage, or if the solver gave up.
///
/// A hint is no more than that: where the best prices are not unique it may lead astray, and a search that ends away from the bound is made
/// again without it.
pub fn attack(scenario: &Scenario, target: Setting, place: Place, objective: Objective, hints: Hints, effort: Effort) -> Option<Attack> {
    let first = attack_once(scenario, target, place, objective, hints, effort);
    let bound = hints.witness.and_then(|witness| witness.bound(place, scenario.leakage(), scenario.leakage_holds()).ok());
    let reached = |first: &Attack| match (objective, &bound) {
        (Objective::Guess, Some(bound)) => first.guessing_probability() > bound.rounded_up() - CLOSE,
        _ => first.settled,
    };
    if hints.witness.is_none() || first.as_ref().is_some_and(reached) {
        return first;
    }
    let second = attack_once(scenario, target, place, objective, Hints { witness: None, ..hints }, effort);
    match (first, second) {
        (Some(first), Some(second)) => {
            let better = match objective {
                Objective::Guess => second.guessing_probability() > first.guessing_probability(),
                Objective::PowerEntropy { .. } => false,
            };
            Some(if better && second.residual <= first.residual.max(USUAL_RESIDUAL) { second } else { first })
        }
        (first, second) => first.or(second),
    }
}

/// This close to the bound a guessing probability is as good as it.
const CLOSE: f64 = 1e-5;
/// A residual that is due to rounding.
const USUAL_RESIDUAL: f64 = 1e-10;

fn attack_once(scenario: &Scenario, target: Setting, place: Place, objective: Objective, hints: Hints, effort: Effort) -> Option<Attack> {
    let geometry = scenario.geometry();
    let intervals = narrowed(place, geometry)?;
    if target.x >= geometry.preparations || target.y >= geometry.measurements {
        return None;
    }
    let mut search = Search::new(scenario, target, intervals, objective, effort);
    search.add_known(hints.known);
    let (rounds, prices, settled) = search.run(hints.witness.and_then(|witness| Prices::of(witness, scenario)));
    let prices = prices?;
    let allowed = |leakage: &[f64]| leakage.iter().zip(scenario.leakage()).all(|(found, limit)| found <= limit);
    let obeyed = |attained: &Attained| match scenario.leakage_holds() {
        LeakageReading::OnAverage => allowed(&attained.mean_leakage),
        LeakageReading::EveryEmission => allowed(&attained.largest_leakage),
    };
    // At an extremal behaviour those worth their price may not suffice for any mixture that obeys.
    let mixed = [IDLE, f64::INFINITY].into_iter().filter_map(|idle| search.model(&prices, idle));
    let (model, attained) = mixed.into_iter().find(|(_, attained)| obeyed(attained))?;
    let residual = residual(place, &attained);
    Some(Attack { model, attained, residual, rounds, settled })
}

/// Columns worth less than their price by more than this are left out where weights are sought.
const IDLE: f64 = 1e-4;

/// The place as intervals, those with a width a little narrower.
fn narrowed(place: Place, geometry: Geometry) -> Option<Table<[f64; 2]>> {
    match place {
        Place::Behaviour(table) => fits(table, geometry).then(|| {
            let setting = |values: &Vec<f64>| {
                let sum: f64 = values.iter().sum();
                values.iter().map(|p| [p / sum, p / sum]).collect()
            };
            table.iter().map(|table| table.iter().map(setting).collect()).collect()
        }),
        Place::Region(table) => fits(table, geometry).then(|| {
            let inner = |[low, high]: &[f64; 2]| {
                let margin = MARGIN.min(0.25 * (high - low).max(0.0));
                let bounded = |value: f64, end: f64, by: f64| if value == end { end } else { value + by };
                [bounded(*low, 0.0, margin), bounded(*high, 1.0, -margin)]
            };
            table.iter().map(|table| table.iter().map(|values| values.iter().map(inner).collect()).collect()).collect()
        }),
        // A score alone is not attacked.
        Place::Scores(_) => None,
    }
}

fn residual(place: Place, attained: &Attained) -> f64 {
    let interval = |x: usize, y: usize, b: usize| match place {
        Place::Behaviour(table) => [table[x][y][b]; 2],
        Place::Region(table) => table[x][y][b],
        Place::Scores(_) => [0.0, 1.0],
    };
    let mut most = 0.0f64;
    for (x, table) in attained.behaviour.iter().enumerate() {
        for (y, values) in table.iter().enumerate() {
            for (b, p) in values.iter().enumerate() {
                let [low, high] = interval(x, y, b);
                most = most.max(low - p + attained.error).max(p - high + attained.error);
            }
        }
    }
    if most > 0.0 { most.next_up() } else { 0.0 }
}

/// A leakage a little below a limit.
fn within(limit: f64) -> f64 {
    (limit * (1.0 - 1e-9)).min(limit - MARGIN).max(limit * 0.5)
}

/// The space in which strategies for a scenario are sought.
pub(super) fn space(scenario: &Scenario, target: Setting, objective: Objective, effort: Effort) -> Space {
    let geometry = scenario.geometry();
    let confinement = scenario.leakage().iter().map(|limit| match (scenario.leakage_holds(), *limit) {
        (_, 0.0) => Confinement::Inside,
        (_, 1.0) | (LeakageReading::OnAverage, _) => Confinement::Free,
        (LeakageReading::EveryEmission, limit) => Confinement::AtMost(within(limit)),
    });
    let confinement: Vec<Confinement> = confinement.collect();
    let leaking = confinement.iter().filter(|confinement| **confinement != Confinement::Inside).count();
    // States inside a carrier span no more than one dimension each.
    let carrier_dimension = (geometry.carrier_dimension as usize).min(geometry.preparations);
    let dimension = carrier_dimension + leaking.min(effort.extra_dimensions);
    Space { geometry, dimension, carrier_dimension, confinement, target, objective }
}

struct Search {
    space: Space,
    constraints: Constraints,
    effort: Effort,
    numbers: Numbers,
    columns: Vec<Column>,
    reach: f64,
}

impl Search {
    fn new(scenario: &Scenario, target: Setting, intervals: Table<[f64; 2]>, objective: Objective, effort: Effort) -> Self {
        let on_average = scenario.leakage_holds() == LeakageReading::OnAverage;
        let limits = scenario.leakage().iter();
        let mean_leakage = limits.map(|limit| (on_average && *limit > 0.0 && *limit < 1.0).then(|| within(*limit))).collect();
        Self {
            space: space(scenario, target, objective, effort),
            constraints: Constraints { intervals, mean_leakage },
            effort,
            numbers: Numbers::new(effort.seed),
            columns: Vec::new(),
            reach: BLIND_REACH,
        }
    }

    /// Strategies from elsewhere, brought into this space if they fit.
    fn add_known(&mut self, known: &[Strategy]) {
        for strategy in known {
            let fitting = strategy.states.len() == self.space.geometry.preparations
                && strategy.measurements.len() == self.space.geometry.measurements
                && strategy.states.iter().all(|state| state.len() == self.space.dimension)
                && strategy.measurements.iter().flatten().all(|element| element.nrows() == self.space.dimension);
            if fitting {
                self.columns.push(self.space.column(strategy.clone()));
            }
        }
    }

    /// Rounds, the last prices, and whether nothing better was found in the end.
    fn run(&mut self, hint: Option<Prices>) -> (usize, Option<Prices>, bool) {
        self.add_fixed();
        if hint.is_some() {
            self.reach = HINTED_REACH;
        }
        for start in 0..4 * self.space.geometry.outcomes {
            let start = self.random(start);
            let prices = hint.clone().unwrap_or_else(|| self.free());
            let column = self.climbed_from_random(start, &prices, if hint.is_some() { self.effort.steps } else { 1 });
            self.columns.push(column);
        }
        let centre = hint.unwrap_or_else(|| self.free());
        let (mut kept, mut last): (Option<Prices>, Option<Prices>) = (None, None);
        for round in 0..self.effort.rounds {
            let Some(Priced { prices, leans, value }) = self.constraints.prices(&self.columns, &centre, self.reach) else {
                return (round, last, false);
            };
            if !leans && value >= self.space.objective.largest() - FULL {
                return (round, Some(prices), true);
            }
            last = Some(prices.clone());
            // Prices of an early round swing widely; between them and those before lie better ones.
            let middle = kept.as_ref().map_or_else(|| prices.clone(), |kept| kept.mixed_with(&prices, KEPT));
            let mut found = self.improved(&middle, &prices);
            kept = Some(middle);
            if found.is_empty() {
                found = self.improved(&prices, &prices);
                kept = Some(prices.clone());
            }
            if found.is_empty() {
                found = self.random_improvements(&prices, &prices, LAST_STARTS * self.effort.starts);
            }
            if found.is_empty() {
                if !leans || self.reach >= LAST_REACH {
                    return (round, Some(prices), true);
                }
                self.reach *= 4.0;
                continue;
            }
            found.sort_by(|one, other| other.0.total_cmp(&one.0));
            let before = self.columns.len();
            for (_, column) in found {
                if self.columns.len() - before < ADDED && !self.columns[before..].iter().any(|kept| same(kept, &column, SAME)) {
                    self.columns.push(column);
                }
            }
        }
        let prices = self.constraints.prices(&self.columns, &centre, self.reach).map(|priced| priced.prices);
        (self.effort.rounds, prices, false)
    }

    /// Prices before anything is known.
    fn free(&self) -> Prices {
        let Geometry { preparations, measurements, outcomes, .. } = self.space.geometry;
        Prices { weight: 0.0, behaviour: vec![vec![vec![0.0; outcomes]; measurements]; preparations], leakage: vec![1.0; preparations] }
    }

    /// Climbs, under the prices `climbed`, from the columns whose price is their value and from random starts; what is kept improves the
    /// mixture under the prices of the master problem.
    fn improved(&mut self, climbed: &Prices, prices: &Prices) -> Vec<(f64, Column)> {
        let mut found = Vec::new();
        for j in self.in_use(prices) {
            let Column { strategy, behaviour, .. } = &self.columns[j];
            let slope = self.space.objective.slope(&behaviour[self.space.target.x][self.space.target.y]);
            self.keep(self.space.climb(strategy.clone(), climbed, slope, self.effort.steps / 4), prices, &mut found);
        }
        found.extend(self.random_improvements(climbed, prices, self.effort.starts));
        found
    }

    /// Columns whose price is their value, one of each kind.
    fn in_use(&self, prices: &Prices) -> Vec<usize> {
        let gain = |column: &Column| prices.gain(column.value, &column.behaviour, &column.leakage);
        let mut close: Vec<(f64, usize)> = self.columns.iter().map(gain).zip(0..).filter(|(gain, _)| *gain > -1e-6).collect();
        close.sort_by(|one, other| other.0.total_cmp(&one.0));
        let mut chosen: Vec<usize> = Vec::new();
        for (_, j) in close {
            if chosen.len() < CLIMBED && !chosen.iter().any(|other| same(&self.columns[*other], &self.columns[j], KIND)) {
                chosen.push(j);
            }
        }
        chosen
    }

    fn random_improvements(&mut self, climbed: &Prices, prices: &Prices, starts: usize) -> Vec<(f64, Column)> {
        let mut found = Vec::new();
        for start in 0..starts {
            let start = self.random(start);
            let column = self.climbed_from_random(start, climbed, self.effort.steps);
            self.keep(column, prices, &mut found);
        }
        found
    }

    fn keep(&self, column: Column, prices: &Prices, found: &mut Vec<(f64, Column)>) {
        let gain = prices.gain(column.value, &column.behaviour, &column.leakage);
        if gain > self.effort.gain {
            found.push((gain, column));
        }
    }

    fn climbed_from_random(&self, (outcome, start): (usize, Strategy), prices: &Prices, steps: usize) -> Column {
        let outcomes = self.space.geometry.outcomes;
        let certain: Vec<f64> = (0..outcomes).map(|b| f64::from(u8::from(b == outcome % outcomes))).collect();
        let slope = self.space.objective.slope(&certain);
        self.space.climb(start, prices, slope, steps)
    }

    /// A random strategy, real if the number is even, and the outcome it is to favour.
    fn random(&mut self, number: usize) -> (usize, Strategy) {
        (number / 2, random_strategy(&self.space, &mut self.numbers, number))
    }

    /// Strategies that ignore the preparation: every combination of fixed outcomes, as far as there are few.
    fn add_fixed(&mut self) {
        let Space { geometry, dimension, .. } = self.space;
        let combinations = geometry.outcomes.checked_pow(geometry.measurements as u32).unwrap_or(usize::MAX).min(32);
        for number in 0..combinations {
            let fixed = |y: usize| number / geometry.outcomes.saturating_pow(y as u32) % geometry.outcomes;
            let element = |b: usize, y: usize| {
                if fixed(y) == b { Matrix::identity(dimension, dimension) } else { Matrix::zeros(dimension, dimension) }
            };
            let measurements = (0..geometry.measurements).map(|y| (0..geometry.outcomes).map(|b| element(b, y)).collect()).collect();
            let axis = Vector::from_fn(dimension, |i, _| Complex::from(f64::from(u8::from(i == 0))));
            let strategy = Strategy { states: vec![axis; geometry.preparations], measurements };
            self.columns.push(self.space.column(strategy));
        }
    }

    /// The mixture of strategies that are worth their price, up to `idle`, as an explicit model, and what it attains.
    fn model(&self, prices: &Prices, idle: f64) -> Option<(Model, Attained)> {
        let weights = self.constraints.weights(&self.columns, prices, LAST_REACH, idle)?;
        let dimension = self.space.dimension;
        let carrier =
            Matrix::from_fn(dimension, dimension, |i, j| Complex::from(f64::from(u8::from(i == j && i < self.space.carrier_dimension))));
        let parts = weights.iter().zip(&self.columns).filter(|(weight, _)| **weight > 0.0).map(|(weight, column)| Part {
            weight: weight.min(1.0),
            strategy: column.strategy.clone(),
            carrier: carrier.clone(),
            guess: likeliest(&column.behaviour[self.space.target.x][self.space.target.y]),
        });
        let mut model = Model { parts: parts.collect() };
        let total: f64 = model.parts.iter().map(|part| part.weight).sum();
        model.parts.iter_mut().for_each(|part| part.weight /= total);
        let attained = attained(&model, self.space.geometry, self.space.target, self.space.objective).ok()?;
        Some((model, attained))
    }
}

/// A random strategy, real if the number is even.
pub(super) fn random_strategy(space: &Space, numbers: &mut Numbers, number: usize) -> Strategy {
    let Space { geometry, dimension, carrier_dimension, .. } = *space;
    let mut amplitude = || Complex::new(numbers.normal(), if number.is_multiple_of(2) { 0.0 } else { numbers.normal() });
    let mut state = |confinement: &Confinement| {
        let side = if *confinement == Confinement::Free { dimension } else { carrier_dimension };
        Vector::from_fn(dimension, |i, _| if i < side { amplitude() } else { Complex::from(0.0) }).normalize()
    };
    let states = space.confinement.iter().map(&mut state).collect();
    let mut measurement = || {
        let basis = QR::new(Matrix::from_fn(dimension, dimension, |_, _| amplitude())).q();
        let offset = (amplitude().re.abs() * 16.0) as usize;
        let element = |b: usize| {
            let mine = (0..dimension).filter(|i| (i + offset) % geometry.outcomes == b);
            mine.fold(Matrix::zeros(dimension, dimension), |sum, i| sum + basis.column(i) * basis.column(i).adjoint())
        };
        (0..geometry.outcomes).map(element).collect()
    };
    let measurements = (0..geometry.measurements).map(|_| measurement()).collect();
    Strategy { states, measurements }
}

fn same(one: &Column, other: &Column, within: f64) -> bool {
    let pairs = one.behaviour.iter().flatten().flatten().zip(other.behaviour.iter().flatten().flatten());
    let leaks = one.leakage.iter().zip(&other.leakage);
    pairs.chain(leaks).all(|(a, b)| (a - b).abs() < within)
}
