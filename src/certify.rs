//! The pure pipeline: a request in, a certificate and its witnesses out.

use std::sync::Arc;

use num_rational::BigRational;

use crate::{
    attack::{Effort, Hints, attack, objective::Objective},
    bound::{Answer, Found, guessing_probability, power_entropy},
    certificate::{Bracket, Certificate, FailureTotal, Origin, OutsideModel, PowerCertificate, Reason, TargetCertificate, Verdict},
    commitment::Commitment,
    counts::{Counts, Table},
    entropy::{
        extraction::{extractable, hashing_cost, min_entropy, min_entropy_per_round, publication_cost},
        independent::{block_min_entropy, entropy_in_bits, largest_power_entropy, power_for},
    },
    exact::{decimal, round_down},
    fault::Fault,
    leakage::budget::Budget,
    relaxation::level::{Level, LevelChoice},
    request::{Data, EntropyChoice, Failure, LostRounds, LostTreatment, Request, RoundModel},
    scenario::{LeakageReading, Scenario, Setting},
    score::Score,
    solver::Limits,
    statistics::region::{frequencies, region},
    witness::{
        check::{CheckedBound, CheckedWitness, Place, proves_contradiction},
        pool::{Kept, MadeFor, Pool, Spot, Subject},
        witness::{Claim, Witness},
    },
};

/// A certificate with the witnesses that it names by digest.
#[derive(Debug, Clone)]
pub struct Certification {
    pub certificate: Certificate,
    pub witnesses: Vec<Witness>,
}

/// Certifies one request. Never fails: what cannot be certified is refused, with the reason in the certificate.
pub fn certify(request: &Request) -> Certification {
    let evidence = evidence(request);
    let mut draft = Draft::new(request, Some(&evidence));
    for target in request.scenario().targets() {
        match guessing_probability(request.scenario(), *target, evidence.place(), request.start, Limits::default()) {
            Answer::Outside(contradiction) => {
                let least = contradiction.least_leakage.as_ref().map(|(least, witness)| (least, witness));
                return draft.outside(&contradiction.found.witness, least);
            }
            Answer::Bounded(found) => {
                draft.add(request, *target, &Grounds::fresh(&found));
                if request.bracket {
                    draft.attack(request, *target, &evidence, &found.witness);
                }
                let PowerTerms { power, .. } = power_terms(request, *target);
                if let Some(level) = request.power_start.filter(|_| found.bound.rounded_up() < 1.0)
                    && let Some(found) = power_entropy(request.scenario(), *target, evidence.place(), power, level, Limits::default())
                {
                    draft.add_power(request, *target, &evidence, &Grounds::fresh(&found));
                }
            }
            Answer::Unverified => draft.add_unverified(request, *target),
        }
    }
    draft.conclude()
}

/// A certificate that kept witnesses gave. Its witnesses are the pool's.
#[derive(Debug, Clone)]
pub struct FromPool {
    pub certificate: Certificate,
    pub kept: Vec<Arc<Kept>>,
    /// Estimate of how many bits per round of a target a solve would give more, the largest over the targets.
    pub loss: f64,
}

/// Certifies a request with kept witnesses alone, without a solve; the pool's documentation says when they are good enough.
///
/// `None` where a solve is called for: some target's bound is estimated to give away more than `acceptable_loss` bits per round of that
/// target, or the numbers seem to contradict the declaration. Plug-in figures, which are diagnostics, are always solved.
pub fn certify_from(pool: &Pool, request: &Request, acceptable_loss: f64) -> Option<FromPool> {
    if request.rounds != RoundModel::Independent || request.bracket {
        return None;
    }
    let evidence = evidence(request);
    let Evidence::Region(region) = &evidence else { return None };
    let scenario = request.scenario();
    let spot = Spot::new(scenario, region);
    if pool.contradicts(&spot) {
        return None;
    }
    let mut draft = Draft::new(request, Some(&evidence));
    let (mut kept, mut loss) = (Vec::new(), 0f64);
    let mut best = |subject, level, power| {
        let best = pool.best(subject, &spot, level, power).filter(|best| best.loss <= acceptable_loss)?;
        let bound = best.kept.witness().bound(evidence.place(), scenario.leakage(), scenario.leakage_holds()).ok()?;
        loss = loss.max(best.loss);
        kept.push(Arc::clone(&best.kept));
        Some((best.kept, bound))
    };
    for target in scenario.targets() {
        let (guess, bound) = best(Subject::Guess(*target), request.start, None)?;
        if proves_contradiction(guess.witness(), &bound, evidence.place()) {
            return None;
        }
        draft.add(request, *target, &Grounds::kept(&guess, &bound));
        let Some(level) = request.power_start.filter(|_| bound.rounded_up() < 1.0) else { continue };
        let PowerTerms { power, failure } = power_terms(request, *target);
        let added = best(Subject::Power(*target), level, Some(power))
            .map(|(of_power, bound)| draft.add_power(request, *target, &evidence, &Grounds::kept(&of_power, &bound)));
        // One that is only shown is not worth a solve; one that is more than the data allow is.
        if added == Some(false) || (added.is_none() && failure.is_some()) {
            return None;
        }
    }
    Some(FromPool { certificate: draft.conclude().certificate, kept, loss })
}

/// Where a request's witnesses were made, and at which levels, as the pool wants to know it.
pub fn keepable(request: &Request, certification: &Certification) -> Vec<(Witness, MadeFor)> {
    let Evidence::Region(region) = evidence(request) else { return Vec::new() };
    let scenario = request.scenario();
    let certificate = &certification.certificate;
    let level_of = |digest: &str| {
        let of_target = |target: &TargetCertificate| {
            let guess = target.level.filter(|_| target.witness.as_deref() == Some(digest));
            guess.or_else(|| target.power.as_ref().filter(|power| power.witness == digest).map(|power| power.level))
        };
        let named = certificate.targets.iter().find_map(of_target);
        // The certificate of a contradiction does not say its level.
        named.map_or_else(|| Level::ALL.to_vec(), |level| vec![level])
    };
    let made = |witness: &Witness| {
        let level = level_of(&witness.digest()).into_iter().find(|level| witness.is_of_level(*level))?;
        let (leakage, leakage_holds) = (scenario.leakage().to_vec(), scenario.leakage_holds());
        let of_power = matches!(witness.claim, Claim::Power { .. });
        let asked = request.power_start.filter(|_| of_power).unwrap_or(request.start);
        Some((witness.clone(), MadeFor { region: region.clone(), leakage, leakage_holds, asked, level }))
    };
    certification.witnesses.iter().filter_map(made).collect()
}

/// Certifies a block of rounds with memory under a commitment. No solve is involved: bits follow from counts and factors.
///
/// `in_time` says whether the batch began after its commitment was recorded. A batch that did not is refused.
///
/// # Errors
/// Counts that do not fit the commitment's geometry or number of rounds, or a treatment of lost rounds that does not exist; pointers are
/// into a document with the members `counts` and `lost_rounds`.
pub fn certify_block(
    commitment: &Commitment,
    level: LevelChoice,
    mut counts: Table<u64>,
    lost_rounds: Option<LostRounds>,
    in_time: bool,
) -> Result<Certificate, Fault> {
    let geometry = commitment.scenario.geometry();
    if let Some(lost) = &lost_rounds {
        lost.fold_into(&mut counts, geometry.outcomes)?;
    }
    certify_counted(commitment, level, counts, lost_rounds, in_time)
}

/// The same for counts that lost rounds were folded into already, as they stand in a record.
pub(crate) fn certify_counted(
    commitment: &Commitment,
    level: LevelChoice,
    counts: Table<u64>,
    lost_rounds: Option<LostRounds>,
    in_time: bool,
) -> Result<Certificate, Fault> {
    let counts = Counts::try_new(counts, commitment.scenario.geometry()).map_err(|fault| fault.under("/counts"))?;
    commitment.accepts(&counts).map_err(|fault| fault.under("/counts"))?;
    let FailureTotal { estimation, hashing, .. } = commitment.failure;
    let request = Request {
        scenario: commitment.scenario.clone(),
        data: Data::Counts(counts.clone()),
        rounds: RoundModel::Memory,
        failure: Failure { estimation, hashing },
        level,
        start: Level::Lean,
        power_start: None,
        entropy: EntropyChoice::Power,
        lost_rounds,
        bracket: false,
    };
    let mut certificate = Draft::new(&request, None).certificate;
    if !in_time {
        certificate.reason = Some(Reason::Uncommitted);
        return Ok(certificate);
    }
    let account = commitment.account(&counts);
    certificate.certified_bits = account.certified_bits;
    if account.certified_bits > 0 {
        certificate.verdict = Verdict::Certified;
        certificate.bits_per_round = (account.certified_bits as f64 / counts.total() as f64).next_down();
    } else {
        certificate.reason = Some(Reason::ZeroBound);
    }
    certificate.block = Some(account);
    Ok(certificate)
}

/// What is known of the behaviour.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum Evidence {
    Point(Table<f64>),
    Region(Table<[f64; 2]>),
    Scores(Vec<Score>),
}

impl Evidence {
    pub(crate) fn place(&self) -> Place<'_> {
        match self {
            Self::Point(table) => Place::Behaviour(table),
            Self::Region(table) => Place::Region(table),
            Self::Scores(scores) => Place::Scores(scores),
        }
    }

    /// Intervals that hold every behaviour within a distance of this in each probability; none for scores.
    pub(crate) fn widened(&self, by: f64) -> Option<Table<[f64; 2]>> {
        let wider = |[low, high]: [f64; 2]| [(low - by).next_down().max(0.0), (high + by).next_up().min(1.0)];
        match self {
            Self::Point(table) => Some(map(table, |p| wider([*p, *p]))),
            Self::Region(table) => Some(map(table, |interval| wider(*interval))),
            Self::Scores(_) => None,
        }
    }
}

fn map<T>(table: &Table<T>, of: impl Fn(&T) -> [f64; 2]) -> Table<[f64; 2]> {
    table.iter().map(|table| table.iter().map(|values| values.iter().map(&of).collect()).collect()).collect()
}

/// The most by which the behaviour of an attack that is recorded may miss the data.
pub(crate) const LARGEST_RESIDUAL: f64 = 1e-6;

pub(crate) fn evidence(request: &Request) -> Evidence {
    match (&request.data, request.rounds) {
        (Data::Behaviour(behaviour), _) => Evidence::Point(behaviour.table().clone()),
        (Data::Scores(scores), _) => Evidence::Scores(scores.clone()),
        (Data::Counts(counts), RoundModel::PlugIn) => Evidence::Point(frequencies(counts)),
        (Data::Counts(counts), RoundModel::Independent | RoundModel::Memory) => {
            Evidence::Region(region(counts, request.failure.estimation - power_failure(request)))
        }
    }
}

/// The power of a diagnostic, at which a power entropy is the Shannon entropy up to a millionth.
const SMALL_POWER: u32 = 1 << 10;

/// Which power entropy is asked for.
pub(crate) struct PowerTerms {
    /// `β` in units of `2^-30`.
    pub(crate) power: u32,
    /// The target's share of the estimation failure; `None` if no bits are to come from it.
    pub(crate) failure: Option<f64>,
}

pub(crate) fn power_terms(request: &Request, target: Setting) -> PowerTerms {
    let share = |failure: f64| (failure / request.scenario.targets().len() as f64).next_down();
    match (request.rounds, request.entropy, request.rounds_at(target)) {
        (RoundModel::Independent, EntropyChoice::Auto | EntropyChoice::Power, Some(rounds)) => {
            let failure = share(power_failure(request));
            PowerTerms { power: power_for(rounds, failure), failure: Some(failure) }
        }
        (RoundModel::Independent, EntropyChoice::Guessing, Some(rounds)) => {
            PowerTerms { power: power_for(rounds, share(request.failure.estimation)), failure: None }
        }
        (RoundModel::PlugIn | RoundModel::Memory, _, _) | (RoundModel::Independent, _, None) => {
            PowerTerms { power: SMALL_POWER, failure: None }
        }
    }
}

/// What power entropies take of the estimation failure, all targets together.
fn power_failure(request: &Request) -> f64 {
    match request.entropy {
        EntropyChoice::Guessing => 0.0,
        EntropyChoice::Auto | EntropyChoice::Power => 0.5 * request.failure.estimation,
    }
}

/// What a bound rests on.
pub(crate) struct Grounds<'a> {
    pub(crate) level: Level,
    pub(crate) witness: &'a CheckedWitness,
    pub(crate) bound: &'a CheckedBound,
    pub(crate) origin: Option<Origin>,
}

impl<'a> Grounds<'a> {
    fn fresh(found: &'a Found) -> Self {
        Self { level: found.level, witness: &found.witness, bound: &found.bound, origin: Some(Origin::Fresh) }
    }

    fn kept(kept: &'a Kept, bound: &'a CheckedBound) -> Self {
        Self { level: kept.level(), witness: kept.witness(), bound, origin: Some(Origin::Kept) }
    }
}

/// A certificate in the making.
pub(crate) struct Draft {
    certificate: Certificate,
    witnesses: Vec<Witness>,
}

impl Draft {
    /// Everything that is known before the first bound.
    pub(crate) fn new(request: &Request, evidence: Option<&Evidence>) -> Self {
        let (counts, behaviour, scores) = match &request.data {
            Data::Counts(counts) => (Some(counts), None, None),
            Data::Behaviour(behaviour) => (None, Some(behaviour.table().clone()), None),
            Data::Scores(scores) => (None, None, Some(scores.clone())),
        };
        let region = match evidence {
            None | Some(Evidence::Point(_) | Evidence::Scores(_)) => None,
            Some(Evidence::Region(table)) => Some(table.clone()),
        };
        let failure = (request.rounds != RoundModel::PlugIn).then(|| FailureTotal::new(request.failure, &request.scenario));
        let certificate = Certificate {
            verdict: Verdict::Refused,
            reason: None,
            scenario: request.scenario.clone(),
            leakage_budget: request.scenario.leakage_budget().map(Budget::account),
            counts: counts.map(|counts| counts.table().clone()),
            counts_digest: counts.map(|counts| counts.digest()),
            behaviour,
            scores,
            lost_rounds: request.lost_rounds.clone(),
            rounds: request.rounds,
            total_rounds: counts.map(|counts| counts.total()),
            failure,
            level: request.level,
            entropy: request.entropy,
            region,
            targets: Vec::new(),
            block: None,
            certified_bits: 0,
            bits_per_round: 0.0,
            outside_model: None,
            assumptions: assumptions(request),
            warnings: warnings(request),
            version: concat!("bitassay ", env!("CARGO_PKG_VERSION")).to_owned(),
        };
        Self { certificate, witnesses: Vec::new() }
    }

    fn keep(&mut self, witness: &CheckedWitness, origin: Option<Origin>) -> String {
        // A kept one is in the pool.
        if origin != Some(Origin::Kept) && self.witnesses.iter().all(|kept| kept != witness.witness()) {
            self.witnesses.push(witness.witness().clone());
        }
        witness.digest().to_owned()
    }

    pub(crate) fn add(&mut self, request: &Request, target: Setting, grounds: &Grounds) {
        let &Grounds { level, witness, bound, origin } = grounds;
        let digest = self.keep(witness, origin);
        let mut entry = TargetCertificate::without_bound(target, request.rounds_at(target));
        entry.level = Some(level);
        entry.witness = Some(digest);
        entry.origin = origin;
        entry.rounding_cost = Some(witness.rounding_cost());
        entry.fill(bound.rounded_up(), request);
        self.certificate.targets.push(entry);
    }

    /// Seeks an explicit attack on the target that was added last.
    fn attack(&mut self, request: &Request, target: Setting, evidence: &Evidence, witness: &CheckedWitness) {
        let hints = Hints { witness: Some(witness), known: &[] };
        let found = attack(request.scenario(), target, evidence.place(), Objective::Guess, hints, Effort::default());
        if let Some(found) = found {
            self.add_bracket(request, evidence, witness, found.guessing_probability(), found.residual);
        }
    }

    /// Adds an attack to the target that was added last; `false` if it exceeds what the witness allows over the data, widened by how far the
    /// attack's behaviour may miss them. An attack that misses them by more than [`LARGEST_RESIDUAL`] says nothing of interest and is left
    /// out.
    pub(crate) fn add_bracket(
        &mut self,
        request: &Request,
        evidence: &Evidence,
        witness: &CheckedWitness,
        attack: f64,
        residual: f64,
    ) -> bool {
        let Some(widened) = evidence.widened(residual) else { return false };
        let (leakage, reading) = (request.scenario.leakage(), request.scenario.leakage_holds());
        let allowed = witness.bound(Place::Region(&widened), leakage, reading);
        if !allowed.is_ok_and(|allowed| attack <= allowed.rounded_up()) {
            return false;
        }
        if let Some(entry) = self.certificate.targets.last_mut()
            && let Some(bound) = entry.guessing_probability_bound.filter(|_| residual <= LARGEST_RESIDUAL)
        {
            entry.bracket = Some(Bracket { attack, bound, residual });
        }
        true
    }

    /// Adds a power entropy to the target that was added last. One that exceeds what the data allow anyway proves that there is no model, and
    /// is no entropy: it is left out. Answers whether it was added.
    pub(crate) fn add_power(&mut self, request: &Request, target: Setting, evidence: &Evidence, grounds: &Grounds) -> bool {
        let &Grounds { level, witness, bound, origin } = grounds;
        let PowerTerms { power, failure } = power_terms(request, target);
        let entropy_per_round = entropy_in_bits(bound.exact());
        let intervals: Vec<[f64; 2]> = match evidence {
            Evidence::Region(region) => region[target.x][target.y].clone(),
            Evidence::Point(table) => table[target.x][target.y].iter().map(|p| [*p, *p]).collect(),
            Evidence::Scores(_) => vec![[0.0, 1.0]; request.scenario.geometry().outcomes],
        };
        let largest = largest_power_entropy(&intervals, power) * std::f64::consts::LOG2_E;
        if entropy_per_round > largest {
            return false;
        }
        let digest = self.keep(witness, origin);
        let Some(entry) = self.certificate.targets.last_mut() else { return false };
        let rounds = entry.rounds.unwrap_or(0);
        let min_entropy = failure.map(|failure| block_min_entropy(bound.exact(), rounds, power, failure));
        let rounding_cost = witness.rounding_cost();
        entry.power =
            Some(PowerCertificate { power, entropy_per_round, failure, min_entropy, level, witness: digest, origin, rounding_cost });
        if let (Some(known), Some(found), Some(publication), Some(hashing)) =
            (entry.min_entropy, min_entropy, entry.publication_cost, entry.hashing_cost)
        {
            let better = known.max(found);
            entry.min_entropy = Some(better);
            entry.certified_bits = extractable(better, &[publication, hashing]);
        }
        true
    }

    pub(crate) fn add_unverified(&mut self, request: &Request, target: Setting) {
        self.certificate.targets.push(TargetCertificate::without_bound(target, request.rounds_at(target)));
    }

    /// Targets that were added so far.
    pub(crate) fn targets(&self) -> usize {
        self.certificate.targets.len()
    }

    /// The verdict follows from the targets.
    pub(crate) fn conclude(mut self) -> Certification {
        let certificate = &mut self.certificate;
        let bits = certificate.targets.iter().fold(0u64, |sum, target| sum.saturating_add(target.certified_bits));
        let (bounded, random) = (
            certificate.targets.iter().any(|target| target.guessing_probability_bound.is_some()),
            certificate.targets.iter().any(|target| target.min_entropy_per_round > 0.0),
        );
        (certificate.verdict, certificate.reason) = match certificate.rounds {
            RoundModel::PlugIn if random => (Verdict::Estimate, None),
            RoundModel::Independent | RoundModel::Memory if bits > 0 => (Verdict::Certified, None),
            RoundModel::PlugIn | RoundModel::Independent | RoundModel::Memory if bounded => (Verdict::Refused, Some(Reason::ZeroBound)),
            RoundModel::PlugIn | RoundModel::Independent | RoundModel::Memory => (Verdict::Refused, Some(Reason::Unverified)),
        };
        certificate.certified_bits = bits;
        if let Some(rounds) = certificate.total_rounds.filter(|_| bits > 0) {
            certificate.bits_per_round = (bits as f64 / rounds as f64).next_down();
        }
        Certification { certificate: self.certificate, witnesses: self.witnesses }
    }

    /// The numbers contradict the declaration: there is no model to speak of, and bounds found so far are of no interest.
    pub(crate) fn outside(
        mut self,
        contradiction: &CheckedWitness,
        least_leakage: Option<(&BigRational, &CheckedWitness)>,
    ) -> Certification {
        self.witnesses.clear();
        self.certificate.targets.clear();
        self.certificate.verdict = Verdict::Refused;
        self.certificate.reason = Some(Reason::OutsideModel);
        self.certificate.outside_model = Some(OutsideModel {
            witness: self.keep(contradiction, None),
            smallest_uniform_leakage: least_leakage.map(|(least, _)| round_down(least)),
            smallest_uniform_leakage_witness: least_leakage.map(|(_, witness)| self.keep(witness, None)),
        });
        Certification { certificate: self.certificate, witnesses: self.witnesses }
    }
}

impl TargetCertificate {
    /// A target of which nothing is known: the trivial bound, no bits.
    pub fn without_bound(target: Setting, rounds: Option<u64>) -> Self {
        Self {
            preparation: target.x,
            measurement: target.y,
            rounds,
            guessing_probability_bound: None,
            min_entropy_per_round: 0.0,
            min_entropy: None,
            publication_cost: None,
            hashing_cost: None,
            certified_bits: 0,
            level: None,
            witness: None,
            origin: None,
            rounding_cost: None,
            power: None,
            bracket: None,
        }
    }

    /// Fills in everything that follows from a bound on the guessing probability.
    fn fill(&mut self, bound: f64, request: &Request) {
        let bound = bound.min(1.0);
        self.guessing_probability_bound = Some(bound);
        self.min_entropy_per_round = min_entropy_per_round(bound);
        let (RoundModel::Independent | RoundModel::Memory, Some(rounds)) = (request.rounds, self.rounds) else { return };
        let targets = request.scenario.targets().len() as f64;
        let entropy = min_entropy(rounds, self.min_entropy_per_round);
        let publication = publication_cost(rounds, request.scenario.geometry().outcomes);
        // Each target's outcomes are hashed on their own.
        let hashing = hashing_cost((request.failure.hashing / targets).next_down());
        self.min_entropy = Some(entropy);
        self.publication_cost = Some(publication);
        self.hashing_cost = Some(hashing);
        self.certified_bits = extractable(entropy, &[publication, hashing]);
    }
}

impl FailureTotal {
    /// What is accepted, and what the scenario's leakage adds.
    pub(crate) fn new(failure: Failure, scenario: &Scenario) -> Self {
        let Failure { estimation, hashing } = failure;
        let leakage = scenario.leakage_budget().map_or(0.0, Budget::failure);
        let sum = decimal(estimation) + decimal(hashing) + decimal(leakage);
        let mut total = (estimation + hashing).next_up();
        if leakage > 0.0 {
            total = (total + leakage).next_up();
        }
        // The decimal that is printed for a double may lie below it.
        while decimal(total) < sum {
            total = total.next_up();
        }
        Self { estimation, hashing, leakage, total }
    }
}

fn assumptions(request: &Request) -> Vec<String> {
    let scenario = request.scenario();
    let dimension = scenario.geometry().carrier_dimension;
    let leakage = match scenario.leakage_holds() {
        LeakageReading::OnAverage => format!(
            "For every preparation the weight outside some {dimension}-dimensional carrier is at most the declared leakage, on average over \
             everything classical."
        ),
        LeakageReading::EveryEmission => format!(
            "Each pure state that is emitted, given everything classical, has at most the declared leakage outside some \
             {dimension}-dimensional carrier. For a phase-randomised source, whose components are Fock states, this is false even where the \
             mixture satisfies it."
        ),
    };
    let mut assumptions = vec![
        leakage,
        "Settings are chosen independently of the devices and of the adversary.".to_owned(),
        "The adversary holds classical side information only; one entangled with the devices is outside the model.".to_owned(),
        "The target outcomes stay secret until they have been hashed; the counts may be public.".to_owned(),
    ];
    match request.rounds {
        RoundModel::PlugIn => {
            let taken = match request.data {
                Data::Scores(_) => "Stated scores are taken as true",
                Data::Counts(_) | Data::Behaviour(_) => "Frequencies are taken as probabilities",
            };
            assumptions.push(format!("{taken}: a diagnostic from which no bits may be released."));
        }
        RoundModel::Independent => {
            assumptions
                .push("Rounds are independent and identically distributed, given the distribution of the hidden variable.".to_owned());
        }
        RoundModel::Memory => assumptions.extend([
            "No independence of rounds is assumed. Settings were drawn from the committed distribution, independently of the devices, of everything \
             classical and of the past; if the leakage is read on average, its mean over the rounds of the block is within the declared one."
                .to_owned(),
            "Outcomes at settings other than the targets are not published one by one.".to_owned(),
            "The commitment was recorded before the first round of the block was played.".to_owned(),
        ]),
    }
    assumptions.extend(scenario.leakage_budget().map(Budget::sentences).unwrap_or_default());
    if request.lost_rounds.as_ref().is_some_and(|lost| lost.treatment == LostTreatment::FairSampling) {
        assumptions.push(
            "Fair sampling: whether a round is lost does not depend on the settings or on what its outcome would have been.".to_owned(),
        );
    }
    assumptions
}

fn warnings(request: &Request) -> Vec<String> {
    let mut warnings = Vec::new();
    if let Some(lost) = request.lost_rounds.as_ref().filter(|lost| lost.treatment == LostTreatment::FairSampling) {
        warnings.push(format!("{} lost rounds were left out on the assumption of fair sampling.", lost.total()));
    }
    warnings
}
