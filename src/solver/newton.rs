//! The linear system of an interior-point step, for programmes whose variables fall into groups.
//!
//! ```text
//! D Δv + Bᵀ Δw = a,    D_ij = Σ ⟨A_i, Z A_j S⁻¹⟩ + Σ_local (u/s) I_i I_j     one for each group
//! B Δv − Δ Δw = b,     Δ = s/u for tying inequalities, 0 for equalities
//! ```
//!
//! Every group is eliminated on its own; what is left is as large as there are tying rows.

use nalgebra::DMatrix;

use super::{
    dense::Cholesky,
    structure::{Component, Entry, Matrices, Structure},
};

/// Most steps of refinement against the system as it is, without what was added to make it factorise.
const REFINEMENTS: usize = 5;
/// Refinement ends at this share of the right-hand side, or where a step does not make the rest smaller by half.
const REFINED: f64 = 1e-13;

/// What the system is made of at one point. Blocks are numbered as in the programme.
pub struct Weights<'a> {
    pub multipliers: &'a [DMatrix<f64>],
    pub inverse_slacks: &'a [DMatrix<f64>],
    /// `u / s` of every inequality.
    pub rows: &'a [f64],
}

/// The system, factorised.
pub struct System<'a> {
    structure: &'a Structure,
    groups: Vec<Group>,
    ties: Cholesky,
    /// `Δ`.
    diagonal: Vec<f64>,
}

struct Group {
    matrix: DMatrix<f64>,
    factor: Cholesky,
    /// `D⁻¹ Fᵀ`, one column for each tying form.
    response: DMatrix<f64>,
}

impl<'a> System<'a> {
    /// `None` if a matrix cannot be factorised.
    pub fn new(structure: &'a Structure, weights: &Weights) -> Option<Self> {
        let mut groups = Vec::new();
        let mut between = DMatrix::<f64>::zeros(structure.forms, structure.forms);
        for component in &structure.components {
            let mut matrix = component.matrix(weights);
            let factor = Cholesky::shifted(&mut matrix)?;
            let mut response = DMatrix::zeros(matrix.nrows(), component.ties.len());
            for (column, (_, form)) in component.ties.iter().enumerate() {
                form.iter().for_each(|(k, c)| response[(*k, column)] += c);
            }
            factor.solve(&mut response);
            for (form, terms) in &component.ties {
                for (column, (other, _)) in component.ties.iter().enumerate() {
                    between[(*form, *other)] += terms.iter().map(|(k, c)| c * response[(*k, column)]).sum::<f64>();
                }
            }
            groups.push(Group { matrix, factor, response });
        }
        let diagonal: Vec<f64> = structure.ties.iter().map(|tie| tie.inequality.map_or(0.0, |i| 1.0 / weights.rows[i])).collect();
        let count = structure.ties.len();
        let mut tying = DMatrix::from_fn(count, count, |i, j| {
            let (one, other) = (&structure.ties[i], &structure.ties[j]);
            let both = one.sign * other.sign * 0.5 * (between[(one.form, other.form)] + between[(other.form, one.form)]);
            both + if i == j { diagonal[i] } else { 0.0 }
        });
        let ties = Cholesky::shifted(&mut tying)?;
        Some(Self { structure, groups, ties, diagonal })
    }

    /// `(Δv, Δw)` for the right-hand sides `a`, one number for each variable, and `b`, one for each tying row; refined.
    pub fn solve(&self, right: &[f64], ties: &[f64]) -> (Vec<f64>, Vec<f64>) {
        let (mut dv, mut dw) = self.solve_once(right, ties);
        let size = |right: &[f64], ties: &[f64]| right.iter().chain(ties).fold(0.0f64, |size, value| size.max(value.abs()));
        let enough = REFINED * size(right, ties);
        let mut before = f64::INFINITY;
        for _ in 0..REFINEMENTS {
            let (right, ties) = self.missing(right, ties, &dv, &dw);
            let rest = size(&right, &ties);
            if rest <= enough || rest > 0.5 * before {
                break;
            }
            before = rest;
            let (more_v, more_w) = self.solve_once(&right, &ties);
            dv.iter_mut().zip(more_v).for_each(|(value, more)| *value += more);
            dw.iter_mut().zip(more_w).for_each(|(value, more)| *value += more);
        }
        (dv, dw)
    }

    /// The same without refinement.
    pub fn solve_once(&self, right: &[f64], ties: &[f64]) -> (Vec<f64>, Vec<f64>) {
        let structure = self.structure;
        let mut dv = vec![0.0; right.len()];
        let mut forms = vec![0.0; structure.forms];
        for (component, group) in structure.components.iter().zip(&self.groups) {
            let mut local = component.gather(right);
            group.factor.solve_one(&mut local);
            component.scatter(&local, &mut dv);
            for (form, terms) in &component.ties {
                forms[*form] += terms.iter().map(|(k, c)| c * local[*k]).sum::<f64>();
            }
        }
        let mut dw: Vec<f64> = structure.ties.iter().zip(ties).map(|(tie, b)| tie.sign * forms[tie.form] - b).collect();
        self.ties.solve_one(&mut dw);
        let pull = self.pull(&dw);
        for (component, group) in structure.components.iter().zip(&self.groups) {
            for ((form, _), column) in component.ties.iter().zip(group.response.as_slice().chunks_exact(component.variables.len())) {
                component.variables.iter().zip(column).for_each(|(variable, value)| dv[*variable] -= value * pull[*form]);
            }
        }
        (dv, dw)
    }

    /// What a solution leaves of both right-hand sides.
    fn missing(&self, right: &[f64], ties: &[f64], dv: &[f64], dw: &[f64]) -> (Vec<f64>, Vec<f64>) {
        let structure = self.structure;
        let mut left = right.to_vec();
        let mut forms = vec![0.0; structure.forms];
        let pull = self.pull(dw);
        for (component, group) in structure.components.iter().zip(&self.groups) {
            let local = component.gather(dv);
            let mut product = component.gather(&left);
            for (column, value) in group.matrix.as_slice().chunks_exact(local.len()).zip(&local) {
                product.iter_mut().zip(column).for_each(|(sum, entry)| *sum -= entry * value);
            }
            for (form, terms) in &component.ties {
                for (k, c) in terms {
                    product[*k] -= c * pull[*form];
                    forms[*form] += c * local[*k];
                }
            }
            component.scatter(&product, &mut left);
        }
        let tie = |i: usize| ties[i] - structure.ties[i].sign * forms[structure.ties[i].form] + self.diagonal[i] * dw[i];
        let missing = (0..ties.len()).map(tie).collect();
        (left, missing)
    }

    /// `Bᵀ w` in terms of forms.
    fn pull(&self, dw: &[f64]) -> Vec<f64> {
        let mut pull = vec![0.0; self.structure.forms];
        self.structure.ties.iter().zip(dw).for_each(|(tie, value)| pull[tie.form] += tie.sign * value);
        pull
    }
}

impl Component {
    /// What concerns the group of numbers given for all variables.
    pub fn gather(&self, values: &[f64]) -> Vec<f64> {
        self.variables.iter().map(|variable| values[*variable]).collect()
    }

    fn scatter(&self, local: &[f64], values: &mut [f64]) {
        self.variables.iter().zip(local).for_each(|(variable, value)| values[*variable] = *value);
    }

    /// `D`, full.
    fn matrix(&self, weights: &Weights) -> DMatrix<f64> {
        let size = self.variables.len();
        let mut matrix = DMatrix::zeros(size, size);
        for block in &self.blocks {
            block.add_products(&weights.multipliers[block.block], &weights.inverse_slacks[block.block], &mut matrix);
        }
        for (i, form) in &self.inequalities {
            for (one, c) in form {
                for (other, d) in form.iter().filter(|(other, _)| other <= one) {
                    matrix[(*one, *other)] += weights.rows[*i] * c * d;
                }
            }
        }
        matrix.fill_upper_triangle_with_lower_triangle();
        matrix
    }
}

impl Matrices {
    /// `Σ_k v_k A_k`, full, from the variables of the component.
    pub fn at(&self, values: &[f64]) -> DMatrix<f64> {
        let mut matrix = DMatrix::zeros(self.side, self.side);
        let flat = matrix.as_mut_slice();
        for (k, entries) in &self.coefficients {
            for entry in entries {
                flat[entry.place] += entry.half * values[*k];
                flat[entry.mirror] += entry.half * values[*k];
            }
        }
        matrix
    }

    /// `⟨A_k, M⟩` for every variable, `M` symmetric or not.
    pub fn products<'m>(&'m self, matrix: &'m DMatrix<f64>) -> impl Iterator<Item = (usize, f64)> + 'm {
        self.coefficients.iter().map(|(k, entries)| (*k, product(entries, matrix.as_slice())))
    }

    /// Adds `⟨A_i, Z A_j S⁻¹⟩` for `i ≥ j` to the lower triangle.
    fn add_products(&self, z: &DMatrix<f64>, inverse: &DMatrix<f64>, into: &mut DMatrix<f64>) {
        let side = self.side;
        let size = into.nrows();
        let (z, inverse) = (z.as_slice(), inverse.as_slice());
        let mut middle = vec![0.0; side * side];
        for (number, (j, entries)) in self.coefficients.iter().enumerate() {
            middle.fill(0.0);
            for Entry { row, column, half, .. } in entries {
                for (p, q) in [(row, column), (column, row)] {
                    let (from, across) = (&z[p * side..][..side], &inverse[q * side..][..side]);
                    for (to, other) in middle.chunks_exact_mut(side).zip(across) {
                        let factor = half * other;
                        to.iter_mut().zip(from).for_each(|(to, from)| *to += factor * from);
                    }
                }
            }
            let column = &mut into.as_mut_slice()[j * size..][..size];
            for (i, entries) in &self.coefficients[number..] {
                column[*i] += product(entries, &middle);
            }
        }
    }
}

/// `⟨A, M⟩` for a matrix stored by columns.
fn product(entries: &[Entry], flat: &[f64]) -> f64 {
    entries.iter().map(|entry| entry.half * (flat[entry.place] + flat[entry.mirror])).sum()
}
