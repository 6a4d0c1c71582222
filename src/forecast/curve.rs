//! What would be certified at each of many points, for one round model and one entropy.

use serde::{Deserialize, Serialize};

use super::{
    bracket::PointBracket,
    request::{ForecastRequest, Setup},
    shared::{Shared, Spot, Standing},
};
use crate::{
    bound::Found,
    certificate::{Reason, Verdict},
    certify::{Draft, Evidence, Grounds, evidence, power_terms},
    commitment::{CommitmentDocument, Plan, best_power, expected_at},
    counts::{Behaviour, Counts, Table},
    entropy::{
        independent::{entropy_in_bits, largest_power_entropy},
        power::POWER_BITS,
    },
    request::{Data, EntropyChoice, Request, RoundModel},
    scenario::{LeakageDocument, Scenario, Setting},
    witness::{
        check::{CheckedBound, CheckedWitness},
        witness::Witness,
    },
};

/// The power at which an entropy is as good as its limit of many rounds, the Shannon entropy: `β = 2^-16`, which gives away some 10⁻⁵ bit.
pub(super) const LIMIT_POWER: u32 = 1 << (POWER_BITS - 16);

/// What solving anew may gain, in bits, without being tried when every point is to be solved.
const NOTHING: f64 = 1e-7;

/// Which account a curve shows.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Kind {
    pub rounds: RoundModel,
    pub entropy: EntropyChoice,
}

/// What would be certified at one point.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Point {
    #[cfg_attr(feature = "service", schema(value_type = LeakageDocument))]
    pub leakage: LeakageDocument,
    /// Weight of the expected behaviour in a mixture with white noise.
    pub visibility: f64,
    /// Rounds of the batch, all settings together; `null` for plug-in figures.
    pub total_rounds: Option<u64>,
    pub verdict: Verdict,
    pub reason: Option<Reason>,
    /// Bits per round at a target setting: certified bits over those rounds, or, for plug-in figures, the entropy.
    pub bits_per_target_round: f64,
    /// Bits per round, all settings counted.
    pub bits_per_round: f64,
    /// Whole bits that a batch with exactly the expected counts would be certified; `null` for plug-in figures.
    pub certified_bits: Option<u64>,
    /// `sha256:` digests of the checked witnesses that the figures follow from.
    pub witnesses: Vec<String>,
    /// Whether a programme was solved for this point; otherwise it shares the witnesses of others.
    pub solved: bool,
    /// What sharing costs at most, in bits per target round; 0 where there was a solve.
    pub loss: f64,
    /// Where an explicit attack was sought and found.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub bracket: Option<PointBracket>,
}

/// What may be solved for an answer.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Effort {
    /// Nothing; only kept witnesses are used.
    Kept,
    /// Whatever is needed for sharing to cost at most this, in bits per target round.
    Within(f64),
    /// Every point.
    Fresh,
}

/// How far a curve has come.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Progress {
    pub kind: Kind,
    /// Points that need no further solve, out of how many. Power entropies go through the points after the guessing probability has.
    pub settled: usize,
    pub points: usize,
    /// Solves of the whole forecast so far.
    pub solves: usize,
    /// Points of this curve that were attacked.
    pub attacks: usize,
}

/// Kept witnesses, and what is made of them.
pub(super) struct Forecaster<'a> {
    pub(super) request: &'a ForecastRequest,
    /// One for each target.
    pub(super) guessing: Vec<Shared>,
    pub(super) power: Vec<Shared>,
}

/// What is known of each target at one point, and whether that took a solve.
struct Known {
    standings: Vec<Standing>,
    solved: bool,
}

impl Known {
    fn loss(&self) -> f64 {
        let lost = |standing: &Standing| if let Standing::Bounded { loss, .. } = standing { *loss } else { 0.0 };
        if self.solved { 0.0 } else { self.standings.iter().map(lost).fold(0.0, f64::max) }
    }

    /// Whether there is any entropy to be had.
    fn is_open(&self) -> bool {
        let below_one = |standing: &Standing| matches!(standing, Standing::Bounded { bound, .. } if bound.rounded_up() < 1.0);
        !self.is_outside() && self.standings.iter().any(below_one)
    }

    fn is_outside(&self) -> bool {
        self.standings.contains(&Standing::Outside)
    }
}

impl<'a> Forecaster<'a> {
    pub fn new(request: &'a ForecastRequest) -> Self {
        let shared = |entropy: EntropyChoice| {
            let of = |target: &Setting| Shared::new(request.scenario.clone(), *target, entropy, request.start);
            request.scenario.targets().iter().map(of).collect()
        };
        Self { request, guessing: shared(EntropyChoice::Guessing), power: shared(EntropyChoice::Power) }
    }

    /// Solves so far.
    pub fn solves(&self) -> usize {
        self.guessing.iter().chain(&self.power).map(|shared| shared.solves).sum()
    }

    /// What would be certified under each of the setups.
    pub fn points(&mut self, kind: Kind, setups: &[Setup], effort: Effort, told: &mut dyn FnMut(Progress)) -> Vec<Point> {
        let mut points: Vec<Point> = setups.iter().map(|setup| Point::nothing(kind, setup)).collect();
        let cases: Vec<(usize, Case)> =
            setups.iter().enumerate().filter_map(|(i, setup)| Some((i, Case::new(self.request, kind, setup)?))).collect();
        let spots: Vec<Vec<Spot>> = self.spots(cases.iter().map(|(_, case)| case), |_, _| 0);
        let guessed = self.known(kind, EntropyChoice::Guessing, &spots, effort, told);
        // Where the guessing probability reaches 1 there is nothing to be had, and what is outside the model stays outside.
        let (open, closed): (Vec<_>, Vec<_>) =
            cases.iter().zip(guessed).partition(|(_, known)| kind.entropy == EntropyChoice::Power && known.is_open());
        for ((i, case), known) in &closed {
            self.fill(&mut points[*i], case, known, None);
        }
        let spots = self.spots(open.iter().map(|((_, case), _)| case), Case::power);
        let found = self.known(kind, EntropyChoice::Power, &spots, effort, told);
        if kind.rounds == RoundModel::Memory {
            let cases: Vec<(usize, &Case)> = open.iter().map(|((i, case), _)| (*i, case)).collect();
            self.fill_by_factors(&mut points, kind, &cases, found, effort, told);
        } else {
            for (((i, case), guessed), found) in open.iter().zip(found) {
                self.fill(&mut points[*i], case, guessed, Some(&found));
            }
        }
        points
    }

    /// One list of spots for each target.
    fn spots<'c>(&self, cases: impl Iterator<Item = &'c Case> + Clone, power: impl Fn(&Case, Setting) -> u32) -> Vec<Vec<Spot>> {
        let spot =
            |case: &Case, target| Spot { evidence: case.evidence.clone(), leakage: case.leakage.clone(), power: power(case, target) };
        self.request.scenario.targets().iter().map(|target| cases.clone().map(|case| spot(case, *target)).collect()).collect()
    }

    /// What is known at spots, which are listed by target, with as much effort as is allowed.
    fn known(
        &mut self,
        kind: Kind,
        entropy: EntropyChoice,
        spots: &[Vec<Spot>],
        effort: Effort,
        told: &mut dyn FnMut(Progress),
    ) -> Vec<Known> {
        let before = self.solves();
        let points = spots.first().map_or(0, Vec::len);
        let mut known: Vec<Known> = (0..points).map(|_| Known { standings: vec![], solved: false }).collect();
        let kept = match entropy {
            EntropyChoice::Guessing => &mut self.guessing,
            EntropyChoice::Auto | EntropyChoice::Power => &mut self.power,
        };
        let mut solves = before;
        for (shared, spots) in kept.iter_mut().zip(spots) {
            let so_far = solves - shared.solves;
            let mut tell = |settled, of_target| told(Progress { kind, settled, points, solves: so_far + of_target, attacks: 0 });
            let found = match effort {
                Effort::Kept => spots.iter().map(|spot| (shared.standing(spot), false)).collect(),
                Effort::Within(loss) => shared.settle(spots, loss, &mut tell),
                Effort::Fresh => shared.settle(spots, NOTHING, &mut tell),
            };
            solves = so_far + shared.solves;
            for (known, (standing, solved)) in known.iter_mut().zip(found) {
                known.standings.push(standing);
                known.solved |= solved;
            }
        }
        known
    }

    /// The certificate of a point, from bounds on the guessing probability and, if any, on a power entropy.
    fn fill(&self, point: &mut Point, case: &Case, guessed: &Known, found: Option<&Known>) {
        point.solved = guessed.solved || found.is_some_and(|found| found.solved);
        point.loss = guessed.loss().max(found.map_or(0.0, Known::loss));
        if guessed.is_outside() {
            point.reason = Some(Reason::OutsideModel);
            return;
        }
        let mut draft = Draft::new(&case.request, Some(&case.evidence));
        let mut entropies = Vec::new();
        for (t, target) in self.request.scenario.targets().iter().enumerate() {
            let Some((by_guessing, bound)) = bounded(&self.guessing, guessed, t) else {
                draft.add_unverified(&case.request, *target);
                entropies.push(0.0);
                continue;
            };
            draft.add(&case.request, *target, &grounds(by_guessing, bound));
            let mut entropy = 0.0;
            if let Some((by_power, bound)) = found.and_then(|found| bounded(&self.power, found, t)) {
                draft.add_power(&case.request, *target, &case.evidence, &grounds(by_power, bound));
                entropy = case.limit_entropy(*target, bound);
                if case.request.rounds == RoundModel::PlugIn && entropy > 0.0 {
                    point.witnesses.push(by_power.witness.digest().to_owned());
                }
            }
            entropies.push(entropy);
        }
        let certification = draft.conclude();
        let certificate = certification.certificate;
        point.witnesses.extend(certification.witnesses.iter().map(Witness::digest));
        (point.verdict, point.reason) = (certificate.verdict, certificate.reason);
        let targets = self.request.scenario.targets().iter();
        match case.request.rounds {
            RoundModel::PlugIn => {
                let shares = targets.map(|target| self.request.distribution[target.x][target.y]);
                let best = certificate.targets.iter().zip(&entropies).map(|(target, entropy)| target.min_entropy_per_round.max(*entropy));
                let per_round: f64 = shares.clone().zip(best).map(|(share, entropy)| share * entropy).sum();
                (point.bits_per_round, point.bits_per_target_round) = (per_round, per_round / shares.sum::<f64>());
            }
            RoundModel::Independent | RoundModel::Memory => {
                let rounds: u64 = targets.filter_map(|target| case.request.rounds_at(*target)).sum();
                point.certified_bits = Some(certificate.certified_bits);
                point.bits_per_round = certificate.bits_per_round;
                point.bits_per_target_round = per(certificate.certified_bits, rounds);
            }
        }
    }

    /// What a commitment made for each of these points would be expected to give. The power is sought with the witnesses for the largest one, and
    /// witnesses for the best one are tried afterwards, as a commitment does.
    fn fill_by_factors(
        &mut self,
        points: &mut [Point],
        kind: Kind,
        cases: &[(usize, &Case)],
        first: Vec<Known>,
        effort: Effort,
        told: &mut dyn FnMut(Progress),
    ) {
        let mut powers = Vec::new();
        for ((i, case), known) in cases.iter().zip(&first) {
            let best = case.plan.as_ref().zip(self.witnesses(known)).and_then(|(plan, witnesses)| best_power(plan, &witnesses));
            let (bits, power) = best.unwrap_or((0.0, 0));
            self.expect(&mut points[*i], case, known, bits);
            powers.push(power);
        }
        let again: Vec<(usize, &Case, u32)> =
            cases.iter().zip(powers).filter(|(_, power)| *power > 0).map(|((i, case), power)| (*i, *case, power)).collect();
        let spot = |case: &Case, power| Spot { evidence: case.evidence.clone(), leakage: case.leakage.clone(), power };
        let spots: Vec<Spot> = again.iter().map(|(_, case, power)| spot(case, *power)).collect();
        let spots: Vec<Vec<Spot>> = self.request.scenario.targets().iter().map(|_| spots.clone()).collect();
        let second = self.known(kind, EntropyChoice::Power, &spots, effort, told);
        for ((i, case, power), known) in again.into_iter().zip(&second) {
            let plan = case.plan.as_ref().zip(self.witnesses(known));
            let bits = plan.and_then(|(plan, witnesses)| expected_at(plan, power, &witnesses).ok()).unwrap_or(0.0);
            if points[i].certified_bits.is_none_or(|known| bits as u64 > known) {
                let solved = points[i].solved;
                self.expect(&mut points[i], case, known, bits);
                points[i].solved |= solved;
            }
        }
    }

    /// One witness for each target, if there is one.
    fn witnesses(&self, known: &Known) -> Option<Vec<&CheckedWitness>> {
        (0..known.standings.len()).map(|t| bounded(&self.power, known, t).map(|(found, _)| &found.witness)).collect()
    }

    fn expect(&self, point: &mut Point, case: &Case, known: &Known, bits: f64) {
        let rounds = point.total_rounds.unwrap_or(0);
        let share: f64 = self.request.scenario.targets().iter().map(|target| self.request.distribution[target.x][target.y]).sum();
        let bits = bits.max(0.0) as u64;
        point.certified_bits = Some(bits);
        point.bits_per_round = per(bits, rounds);
        point.bits_per_target_round = per(bits, (rounds as f64 * share).ceil() as u64);
        point.witnesses = self.witnesses(known).into_iter().flatten().map(|witness| witness.digest().to_owned()).collect();
        (point.solved, point.loss) = (known.solved, known.loss());
        let verified = case.plan.is_some() && !point.witnesses.is_empty();
        (point.verdict, point.reason) = match bits {
            0 if verified => (Verdict::Refused, Some(Reason::ZeroBound)),
            0 => (Verdict::Refused, Some(Reason::Unverified)),
            _ => (Verdict::Certified, None),
        };
    }
}

/// The best kept witness of a target and its bound, if there is one.
fn bounded<'k, 'b>(kept: &'k [Shared], known: &'b Known, target: usize) -> Option<(&'k Found, &'b CheckedBound)> {
    match known.standings.get(target)? {
        Standing::Bounded { number, bound, .. } => Some((kept.get(target)?.found(*number)?, bound)),
        Standing::Outside | Standing::Unverified => None,
    }
}

fn per(bits: u64, rounds: u64) -> f64 {
    if bits > 0 && rounds > 0 { (bits as f64 / rounds as f64).next_down() } else { 0.0 }
}

impl Point {
    /// No bits, as where there are too few rounds for every setting to be used.
    fn nothing(kind: Kind, setup: &Setup) -> Self {
        let uniform = setup.leakage.iter().all(|value| Some(value) == setup.leakage.first());
        let leakage = match setup.leakage.first() {
            Some(value) if uniform => LeakageDocument::Uniform(*value),
            _ => LeakageDocument::PerPreparation(setup.leakage.clone()),
        };
        Self {
            leakage,
            visibility: setup.visibility,
            total_rounds: setup.rounds.filter(|_| kind.rounds != RoundModel::PlugIn),
            verdict: Verdict::Refused,
            reason: Some(Reason::ZeroBound),
            bits_per_target_round: 0.0,
            bits_per_round: 0.0,
            certified_bits: None,
            witnesses: vec![],
            solved: false,
            loss: 0.0,
            bracket: None,
        }
    }
}

/// A setup as something that can be certified.
pub(super) struct Case {
    /// Drawn up as a certificate; for rounds with memory, of the expected behaviour.
    pub request: Request,
    pub evidence: Evidence,
    pub leakage: Vec<f64>,
    /// Rounds with memory only.
    plan: Option<Plan>,
}

impl Case {
    /// `None` if there are too few rounds for every setting to be used.
    pub fn new(forecast: &ForecastRequest, kind: Kind, setup: &Setup) -> Option<Self> {
        let scenario = forecast.scenario.clone().with_leakage(LeakageDocument::PerPreparation(setup.leakage.clone())).ok()?;
        let expected = mixed(forecast.behaviour.table(), setup.visibility);
        let (data, rounds) = match kind.rounds {
            RoundModel::PlugIn | RoundModel::Memory => {
                (Data::Behaviour(Behaviour::try_new(expected.clone(), scenario.geometry()).ok()?), RoundModel::PlugIn)
            }
            RoundModel::Independent => {
                let counts = expected_counts(&expected, &forecast.distribution, setup.rounds?);
                (Data::Counts(Counts::try_new(counts, scenario.geometry()).ok()?), RoundModel::Independent)
            }
        };
        let plan = match kind.rounds {
            RoundModel::Memory => Some(plan(forecast, scenario.clone(), expected, setup.rounds?)?),
            RoundModel::PlugIn | RoundModel::Independent => None,
        };
        let request = Request {
            scenario,
            data,
            rounds,
            failure: forecast.failure,
            level: forecast.level,
            start: forecast.start,
            power_start: Some(forecast.start),
            entropy: kind.entropy,
            lost_rounds: None,
            bracket: false,
        };
        Some(Self { evidence: evidence(&request), request, leakage: setup.leakage.clone(), plan })
    }

    /// The power that a target's entropy is wanted for.
    fn power(&self, target: Setting) -> u32 {
        match (&self.plan, self.request.rounds) {
            (Some(plan), _) => plan.largest_power(),
            (None, RoundModel::Independent) => power_terms(&self.request, target).power,
            (None, RoundModel::PlugIn | RoundModel::Memory) => LIMIT_POWER,
        }
    }

    /// A power entropy in bits; one that exceeds what the behaviour allows anyway comes from a contradiction, and is none.
    fn limit_entropy(&self, target: Setting, bound: &CheckedBound) -> f64 {
        let Evidence::Point(table) = &self.evidence else { return 0.0 };
        let intervals: Vec<[f64; 2]> = table[target.x][target.y].iter().map(|p| [*p, *p]).collect();
        let largest = largest_power_entropy(&intervals, LIMIT_POWER) * std::f64::consts::LOG2_E;
        Some(entropy_in_bits(bound.exact())).filter(|entropy| *entropy <= largest).unwrap_or(0.0)
    }
}

/// A bound at a point as a certificate rests on it; nothing is said of where its witness comes from.
fn grounds<'f>(found: &'f Found, bound: &'f CheckedBound) -> Grounds<'f> {
    Grounds { level: found.level, witness: &found.witness, bound, origin: None }
}

fn plan(forecast: &ForecastRequest, scenario: Scenario, expected_behaviour: Table<f64>, rounds: u64) -> Option<Plan> {
    let document = CommitmentDocument {
        scenario: scenario.into(),
        expected_behaviour,
        setting_distribution: forecast.distribution.clone(),
        rounds,
        failure: forecast.failure,
        level: forecast.level,
    };
    Plan::try_from(document).ok()
}

/// `v p + (1 − v)/B`.
fn mixed(behaviour: &Table<f64>, visibility: f64) -> Table<f64> {
    if visibility == 1.0 {
        return behaviour.clone();
    }
    let row = |values: &Vec<f64>| {
        let noise = 1.0 / values.len() as f64;
        values.iter().map(|p| (visibility * p + (1.0 - visibility) * noise).clamp(0.0, 1.0)).collect()
    };
    behaviour.iter().map(|rows| rows.iter().map(row).collect()).collect()
}

/// Expected counts as whole numbers; at each setting the likeliest outcome takes up what rounding leaves.
fn expected_counts(behaviour: &Table<f64>, distribution: &[Vec<f64>], rounds: u64) -> Table<u64> {
    let row = |values: &Vec<f64>, share: f64| {
        let here = (rounds as f64 * share).round() as u64;
        let likeliest = (0..values.len()).max_by(|one, other| values[*one].total_cmp(&values[*other])).unwrap_or(0);
        let mut counts: Vec<u64> = values.iter().map(|p| (p * here as f64).round() as u64).collect();
        let others: u64 = counts.iter().enumerate().filter(|(b, _)| *b != likeliest).map(|(_, n)| n).sum();
        counts[likeliest] = here.saturating_sub(others);
        counts
    };
    let rows = behaviour.iter().zip(distribution);
    rows.map(|(rows, shares)| rows.iter().zip(shares).map(|(values, share)| row(values, *share)).collect()).collect()
}
