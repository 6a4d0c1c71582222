//! Questions about a geometry, turned into a programme over the moments.
//!
//! Moments are kept per *group* of values of the hidden variable, sub-normalised: `⟨R_x⟩_e = q_e` and `⟨V⟩_e = d q_e` for
//! every group e, and `Σ_e q_e = 1`. A question says how many groups there are, what is maximised in each, what is known of the
//! behaviour `p(b|x,y) = Σ_e ⟨R_x M_{b|y}⟩_e` and how the leakage `⟨N R_x⟩` is limited. The last outcome is
//! `R_x − Σ_b R_x M_{b|y}`.

use nalgebra::{DMatrix, DVector};

use super::{
    cells::{Cell, cells},
    moments::Moments,
    program::{Block, Program, Row, Term},
    word::{Letter, WordError},
};
use crate::{
    counts::Table,
    entropy::power::power_entropy_down,
    scenario::{Geometry, LeakageReading, Setting},
    score::Score,
    witness::witness::Claim,
};

/// What is known of the behaviour.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Knowledge<'a> {
    Nothing,
    /// Probabilities `[x][y][b]`; the last outcome follows from the others.
    Exactly(&'a Table<f64>),
    /// Intervals `[low, high]`, `[x][y][b]`.
    Within(&'a Table<[f64; 2]>),
    /// Linear scores with their least values.
    Reaching(&'a [Score]),
}

/// How far constraints may be relaxed to make the question answerable whatever the numbers are.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Slack {
    /// Not at all.
    None,
    /// Every probability may miss its interval, and every score its least value, by `t`; `−t` is maximised. A positive least `t` is a contradiction.
    Behaviour,
    /// Every leakage is at most `t` in place of its declared tolerance; `−t` is maximised.
    Leakage,
}

/// A question. Shapes: `leakage` has one entry per preparation.
#[derive(Debug, Clone, PartialEq)]
pub struct Question<'a> {
    pub claim: Claim,
    pub knowledge: Knowledge<'a>,
    pub leakage: &'a [f64],
    pub leakage_holds: LeakageReading,
    pub slack: Slack,
}

/// A programme and the key to its rows, so that multipliers can be read back.
#[derive(Debug, Clone)]
pub struct Posed {
    pub program: Program,
    pub groups: usize,
    /// The setting and outcome of each behaviour row. Intervals give two inequalities for one row: first `p ≤ high`, then
    /// `−p ≤ −low`.
    pub behaviour_rows: Vec<(Setting, usize)>,
    pub behaviour_within: bool,
    /// Inequalities that stand for scores, `−S ≤ −s`, in the order of the scores. They come first.
    pub score_rows: usize,
    /// The group (`None` for a sum over all) and preparation of each leakage row, after the behaviour inequalities.
    pub leakage_rows: Vec<(Option<usize>, usize)>,
    /// The first of the rows that keep each group inside its cell, one per vertex: minus its barycentric coordinate is at most zero.
    pub facet_rows: usize,
    /// Variables of one group; the first of them is its weight `q`.
    pub stride: usize,
    /// Factors by which the elements of each basis were scaled; a multiplier of the unscaled block is `s_i s_j Z_ij`.
    pub scales: Vec<Vec<f64>>,
}

/// A linear form over one group's moments: `(moment, coefficient)`.
type Form = Vec<(usize, f64)>;

/// Variables: moment k of group e is `e · stride + column[k]`, times `factor[k]`.
struct Layout {
    stride: usize,
    column: Vec<usize>,
    factor: Vec<f64>,
}

impl Layout {
    /// All `⟨R_x⟩` and `⟨V⟩/d` of a group are one variable, column 0.
    fn new(moments: &Moments) -> Self {
        let dimension = f64::from(moments.algebra().geometry().carrier_dimension);
        let mut next = 1;
        let (mut column, mut factor) = (Vec::new(), Vec::new());
        for word in moments.words() {
            let (place, times) = match word.letters() {
                [Letter::State(_)] => (0, 1.0),
                [Letter::Carrier] => (0, dimension),
                _ => {
                    next += 1;
                    (next - 1, 1.0)
                }
            };
            column.push(place);
            factor.push(times);
        }
        Self { stride: next, column, factor }
    }

    fn variable(&self, group: usize, moment: usize) -> usize {
        group * self.stride + self.column[moment]
    }

    /// Collects a form of one group into terms over variables.
    fn place(&self, group: usize, form: &[(usize, f64)], into: &mut Vec<(usize, f64)>) {
        for (moment, coefficient) in form {
            let variable = self.variable(group, *moment);
            let value = coefficient * self.factor[*moment];
            match into.iter_mut().find(|(known, _)| *known == variable) {
                Some((_, sum)) => *sum += value,
                None => into.push((variable, value)),
            }
        }
    }
}

/// `⟨R_x M_{b|y}⟩` as a form, for every outcome.
fn probability(moments: &mut Moments, geometry: Geometry, setting: Setting, outcome: usize) -> Result<Form, WordError> {
    let (state, y) = (Letter::State(setting.x as u8), setting.y as u8);
    let mut form = Form::new();
    let last = geometry.outcomes - 1;
    let mut add = |letters: &[Letter], sign: f64| -> Result<(), WordError> {
        form.extend(moments.trace(letters)?.into_iter().map(|(moment, c)| (moment, sign * c as f64)));
        Ok(())
    };
    if outcome < last {
        add(&[state, Letter::Outcome { b: outcome as u8, y }], 1.0)?;
    } else {
        add(&[state], 1.0)?;
        for b in 0..last as u8 {
            add(&[state, Letter::Outcome { b, y }], -1.0)?;
        }
    }
    Ok(form)
}

/// What one group maximises under a claim.
fn objective(moments: &mut Moments, geometry: Geometry, claim: &Claim, shapes: &[Shape], group: usize) -> Result<Form, WordError> {
    match claim {
        Claim::Guess { target } => probability(moments, geometry, *target, group),
        Claim::Score { coefficients } => {
            let mut form = Form::new();
            for setting in geometry.settings() {
                for (b, coefficient) in coefficients[setting.x][setting.y].iter().enumerate() {
                    let weight = *coefficient as f64;
                    form.extend(probability(moments, geometry, setting, b)?.into_iter().map(|(moment, c)| (moment, weight * c)));
                }
            }
            Ok(form)
        }
        // Minus the chord through the values of η_β at the vertices of the cell.
        Claim::Power { target, power, .. } => {
            let Some(cell) = shapes.get(group) else { return Ok(Form::new()) };
            let values = cell.values(*power);
            combination(moments, geometry, *target, &cell.affine_through(&values).map(|l| -l))
        }
        Claim::Contradiction => Ok(Form::new()),
    }
}

/// `Σ_b weights_b ⟨R_x M_{b|y}⟩` as a form.
fn combination(moments: &mut Moments, geometry: Geometry, setting: Setting, weights: &DVector<f64>) -> Result<Form, WordError> {
    let mut form = Form::new();
    for (b, weight) in weights.iter().enumerate() {
        form.extend(probability(moments, geometry, setting, b)?.into_iter().map(|(moment, c)| (moment, weight * c)));
    }
    Ok(form)
}

/// A cell in approximate numbers.
#[derive(Debug, Clone)]
pub struct Shape {
    /// Vertices as columns.
    vertices: DMatrix<f64>,
    /// Its inverse: row j is the barycentric coordinate of vertex j as a linear form of the distribution.
    pub barycentric: DMatrix<f64>,
}

impl Shape {
    /// The cells of a claim; none for claims without cells.
    pub fn of(claim: &Claim, outcomes: usize) -> Vec<Self> {
        let Claim::Power { cuts, .. } = claim else { return Vec::new() };
        let shape = |cell: &Cell| {
            let vertices = cell.matrix();
            let barycentric = vertices.clone().try_inverse().unwrap_or_else(|| DMatrix::zeros(outcomes, outcomes));
            Self { vertices, barycentric }
        };
        cells(outcomes, cuts).unwrap_or_default().iter().map(shape).collect()
    }

    /// `η_β` at the vertices.
    pub fn values(&self, power: u32) -> DVector<f64> {
        let value = |j: usize| power_entropy_down(self.vertices.column(j).as_slice(), power);
        DVector::from_fn(self.vertices.ncols(), |j, _| value(j))
    }

    /// Coefficients `ℓ_b` of the linear form that takes these values at the vertices.
    pub fn affine_through(&self, values: &DVector<f64>) -> DVector<f64> {
        self.barycentric.transpose() * values
    }

    /// The distribution with these barycentric coordinates.
    pub fn distribution(&self, coordinates: &DVector<f64>) -> DVector<f64> {
        &self.vertices * coordinates
    }

    pub fn vertex(&self, j: usize) -> DVector<f64> {
        self.vertices.column(j).into_owned()
    }

    /// `η_β` of the distribution with these barycentric coordinates.
    pub fn value_at(&self, coordinates: &DVector<f64>, power: u32) -> f64 {
        power_entropy_down((&self.vertices * coordinates).as_slice(), power)
    }
}

/// Scale of each element of the bases, so that products of projectors have at most unit norm: `u + u†` of a product that is its own
/// adjoint is `2u`. Scaling `N R_x` by `1/√ε_x` on top of this was measured to cost accuracy, up to a factor of a hundred.
fn scales(moments: &Moments) -> Vec<Vec<f64>> {
    let own_adjoint = |letters: &[Letter]| letters.iter().eq(letters.iter().rev());
    let scale = |letters: &[Letter]| if own_adjoint(letters) { 0.5 } else { std::f64::consts::FRAC_1_SQRT_2 };
    moments.bases().iter().map(|basis| basis.monomials.iter().map(|monomial| scale(monomial.letters())).collect()).collect()
}

/// Writes a question as a programme.
///
/// # Errors
/// A product whose trace is not bounded; the named levels have none.
pub fn pose(moments: &mut Moments, question: &Question) -> Result<Posed, WordError> {
    let geometry = moments.algebra().geometry();
    let groups = question.claim.groups(geometry);
    let settings: Vec<Setting> = geometry.settings().collect();
    // All moments that rows mention are numbered before the variables are laid out.
    let mut probabilities = Vec::new();
    for setting in &settings {
        for b in 0..geometry.outcomes {
            probabilities.push((*setting, b, probability(moments, geometry, *setting, b)?));
        }
    }
    let shapes = Shape::of(&question.claim, geometry.outcomes);
    let mut facets = Vec::new();
    if let Claim::Power { target, .. } = &question.claim {
        for (group, shape) in shapes.iter().enumerate() {
            for row in shape.barycentric.row_iter() {
                facets.push((group, combination(moments, geometry, *target, &-row.transpose())?));
            }
        }
    }
    let objectives = (0..groups).map(|e| objective(moments, geometry, &question.claim, &shapes, e)).collect::<Result<Vec<_>, _>>()?;
    let mut leakages = Vec::new();
    for x in 0..geometry.preparations {
        let form = moments.trace(&[Letter::Outside, Letter::State(x as u8)])?;
        leakages.push(form.into_iter().map(|(moment, c)| (moment, c as f64)).collect::<Form>());
    }
    let layout = Layout::new(moments);
    let slack_variable = groups * layout.stride;
    let variables = slack_variable + usize::from(question.slack != Slack::None);

    let mut program = Program { objective: vec![0.0; variables], equalities: vec![], inequalities: vec![], blocks: vec![] };
    if question.slack == Slack::None {
        for (group, form) in objectives.iter().enumerate() {
            let mut terms = Vec::new();
            layout.place(group, form, &mut terms);
            for (variable, value) in terms {
                program.objective[variable] += value;
            }
        }
    } else {
        program.objective[slack_variable] = -1.0;
    }

    program.equalities.push(Row { terms: (0..groups).map(|e| (e * layout.stride, 1.0)).collect(), right: 1.0 });
    let over_all_groups = |form: &Form| {
        let mut terms = Vec::new();
        (0..groups).for_each(|group| layout.place(group, form, &mut terms));
        terms
    };
    let mut behaviour_rows = Vec::new();
    for (setting, b, form) in &probabilities {
        let Setting { x, y } = *setting;
        let last = *b + 1 == geometry.outcomes;
        match question.knowledge {
            Knowledge::Nothing | Knowledge::Reaching(_) => {}
            Knowledge::Exactly(_) if last => {}
            Knowledge::Exactly(table) => {
                behaviour_rows.push((*setting, *b));
                program.equalities.push(Row { terms: over_all_groups(form), right: table[x][y][*b] });
            }
            // With two outcomes the second interval is the mirror image of the first.
            Knowledge::Within(_) if last && geometry.outcomes == 2 => {}
            Knowledge::Within(table) => {
                behaviour_rows.push((*setting, *b));
                let [mut low, mut high] = table[x][y][*b];
                if geometry.outcomes == 2 {
                    let [mirror_low, mirror_high] = table[x][y][1];
                    (low, high) = (low.max(1.0 - mirror_high), high.min(1.0 - mirror_low));
                }
                let slack = if question.slack == Slack::Behaviour { vec![(slack_variable, -1.0)] } else { vec![] };
                let terms = over_all_groups(form);
                let negated = terms.iter().map(|(variable, value)| (*variable, -value));
                let below = negated.chain(slack.iter().copied()).collect();
                let above = terms.iter().copied().chain(slack.iter().copied()).collect();
                program.inequalities.push(Row { terms: above, right: high });
                program.inequalities.push(Row { terms: below, right: -low });
            }
        }
    }
    let scores = if let Knowledge::Reaching(scores) = question.knowledge { scores } else { &[] };
    for score in scores {
        let negated = |c: i64| -(c as f64);
        let form = probabilities.iter().flat_map(|(setting, b, form)| {
            let weight = negated(score.coefficients[setting.x][setting.y][*b]);
            form.iter().map(move |(moment, c)| (*moment, weight * c))
        });
        let mut terms = over_all_groups(&form.collect());
        if question.slack == Slack::Behaviour {
            terms.push((slack_variable, -1.0));
        }
        program.inequalities.push(Row { terms, right: -score.at_least });
    }
    let mut leakage_rows = Vec::new();
    for (x, form) in leakages.iter().enumerate().filter(|(_, form)| !form.is_empty()) {
        let tolerance = question.leakage[x];
        match (question.slack, question.leakage_holds) {
            (Slack::Leakage, _) => {
                leakage_rows.push((None, x));
                let mut terms = over_all_groups(form);
                terms.push((slack_variable, -1.0));
                program.inequalities.push(Row { terms, right: 0.0 });
            }
            (_, LeakageReading::OnAverage) => {
                leakage_rows.push((None, x));
                program.inequalities.push(Row { terms: over_all_groups(form), right: tolerance });
            }
            (_, LeakageReading::EveryEmission) => {
                for group in 0..groups {
                    leakage_rows.push((Some(group), x));
                    let mut terms = vec![(group * layout.stride, -tolerance)];
                    layout.place(group, form, &mut terms);
                    program.inequalities.push(Row { terms, right: 0.0 });
                }
            }
        }
    }

    let facet_rows = program.inequalities.len();
    for (group, form) in &facets {
        let mut terms = Vec::new();
        layout.place(*group, form, &mut terms);
        program.inequalities.push(Row { terms, right: 0.0 });
    }
    let scales = scales(moments);
    for group in 0..groups {
        for (entries, scale) in moments.blocks().iter().zip(&scales) {
            let mut terms = Vec::new();
            for entry in entries {
                let mut places = Vec::new();
                let form: Form = entry.terms.iter().map(|(moment, c)| (*moment, *c as f64)).collect();
                layout.place(group, &form, &mut places);
                let factor = scale[entry.row] * scale[entry.column];
                terms.extend(places.into_iter().map(|(variable, value)| Term {
                    row: entry.row,
                    column: entry.column,
                    variable,
                    coefficient: value * factor,
                }));
            }
            program.blocks.push(Block { side: scale.len(), terms });
        }
    }
    let behaviour_within = matches!(question.knowledge, Knowledge::Within(_));
    Ok(Posed {
        program,
        groups,
        behaviour_rows,
        behaviour_within,
        score_rows: scores.len(),
        leakage_rows,
        facet_rows,
        stride: layout.stride,
        scales,
    })
}
