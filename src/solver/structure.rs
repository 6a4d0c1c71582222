//! The structure that a programme over moments has: groups of variables that share no block, tied together by few rows.

use crate::relaxation::program::{Program, Row, Term};

/// One term of a symmetric coefficient matrix: `half` is added at `(row, column)` and at `(column, row)`, so that on the diagonal it
/// counts twice. `place` and `mirror` are these two in a matrix that is stored by columns.
#[derive(Debug, Clone, Copy)]
pub struct Entry {
    pub row: usize,
    pub column: usize,
    pub place: usize,
    pub mirror: usize,
    pub half: f64,
}

/// A block, sorted by the variables of its component.
#[derive(Debug)]
pub struct Matrices {
    /// Its place among the blocks of the programme.
    pub block: usize,
    pub side: usize,
    /// `(local variable, A_k)`, by increasing variable.
    pub coefficients: Vec<(usize, Vec<Entry>)>,
}

/// A linear form over the variables of one component: `(local variable, coefficient)`.
pub type Form = Vec<(usize, f64)>;

/// Variables that share blocks, with what concerns them alone.
#[derive(Debug)]
pub struct Component {
    /// Their numbers in the programme.
    pub variables: Vec<usize>,
    pub blocks: Vec<Matrices>,
    /// Inequalities over these variables only: `(number of the inequality, form)`.
    pub inequalities: Vec<(usize, Form)>,
    /// What the tying forms say of these variables: `(number of the form, form)`.
    pub ties: Vec<(usize, Form)>,
}

/// A row that ties components together, or an equality: `sign · form`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Tie {
    pub form: usize,
    pub sign: f64,
    /// `None` for an equality.
    pub inequality: Option<usize>,
    pub equality: Option<usize>,
}

#[derive(Debug)]
pub struct Structure {
    pub components: Vec<Component>,
    /// Rows that differ in sign only share a form.
    pub forms: usize,
    pub ties: Vec<Tie>,
}

impl Structure {
    /// `None` for a programme without this structure: a variable that occurs in no block, an index out of range, a number that is not
    /// finite, a term above the diagonal.
    pub fn new(program: &Program) -> Option<Self> {
        let variables = program.objective.len();
        let mut leader: Vec<usize> = (0..variables).collect();
        let mut occurs = vec![false; variables];
        for block in &program.blocks {
            let first = block.terms.first()?.variable;
            for term in &block.terms {
                if term.variable >= variables || term.column > term.row || term.row >= block.side || !term.coefficient.is_finite() {
                    return None;
                }
                occurs[term.variable] = true;
                let (one, other) = (root(&mut leader, first), root(&mut leader, term.variable));
                leader[one.max(other)] = one.min(other);
            }
        }
        let sound = |row: &Row| row.right.is_finite() && row.terms.iter().all(|(variable, c)| *variable < variables && c.is_finite());
        let rows = || program.equalities.iter().chain(&program.inequalities);
        if occurs.contains(&false) || variables == 0 || !rows().all(sound) || !program.objective.iter().all(|c| c.is_finite()) {
            return None;
        }
        let mut component_of = vec![0; variables];
        let mut place = vec![0; variables];
        let mut components: Vec<Component> = Vec::new();
        for variable in 0..variables {
            let lead = root(&mut leader, variable);
            if lead == variable {
                component_of[variable] = components.len();
                components.push(Component { variables: vec![], blocks: vec![], inequalities: vec![], ties: vec![] });
            } else {
                component_of[variable] = component_of[lead];
            }
            let members = &mut components[component_of[variable]].variables;
            place[variable] = members.len();
            members.push(variable);
        }
        for (number, block) in program.blocks.iter().enumerate() {
            let component = &mut components[component_of[block.terms.first()?.variable]];
            let mut entries: Vec<Vec<Entry>> = vec![Vec::new(); component.variables.len()];
            let side = block.side;
            for Term { row, column, variable, coefficient } in block.terms.iter().copied() {
                let half = if row == column { 0.5 * coefficient } else { coefficient };
                let (here, mirror) = (row + column * side, column + row * side);
                entries[place[variable]].push(Entry { row, column, place: here, mirror, half });
            }
            let coefficients = entries.into_iter().enumerate().filter(|(_, entries)| !entries.is_empty()).collect();
            component.blocks.push(Matrices { block: number, side, coefficients });
        }
        let mut structure = Self { components, forms: 0, ties: Vec::new() };
        let mut known: Vec<Vec<(usize, f64)>> = Vec::new();
        for (number, row) in rows().enumerate() {
            let inequality = number.checked_sub(program.equalities.len());
            let mut touched: Vec<usize> = row.terms.iter().map(|(variable, _)| component_of[*variable]).collect();
            touched.dedup();
            if let (Some(inequality), [component]) = (inequality, touched.as_slice()) {
                let form = row.terms.iter().map(|(variable, c)| (place[*variable], *c)).collect();
                structure.components[*component].inequalities.push((inequality, form));
                continue;
            }
            let is_times = |form: &[(usize, f64)], sign: f64| {
                form.len() == row.terms.len() && form.iter().zip(&row.terms).all(|(one, other)| one.0 == other.0 && one.1 == sign * other.1)
            };
            let found = known.iter().enumerate().find_map(|(number, form)| {
                let sign = [1.0, -1.0].into_iter().find(|sign| is_times(form, *sign))?;
                Some((number, sign))
            });
            let (form, sign) = found.unwrap_or_else(|| {
                known.push(row.terms.clone());
                (known.len() - 1, 1.0)
            });
            let equality = inequality.is_none().then_some(number);
            structure.ties.push(Tie { form, sign, inequality, equality });
        }
        structure.forms = known.len();
        for (number, form) in known.iter().enumerate() {
            for (variable, c) in form {
                let ties = &mut structure.components[component_of[*variable]].ties;
                match ties.last_mut() {
                    Some((last, terms)) if *last == number => terms.push((place[*variable], *c)),
                    _ => ties.push((number, vec![(place[*variable], *c)])),
                }
            }
        }
        Some(structure)
    }
}

/// The smallest variable known to share a block with this one.
fn root(leader: &mut [usize], mut variable: usize) -> usize {
    while leader[variable] != variable {
        leader[variable] = leader[leader[variable]];
        variable = leader[variable];
    }
    variable
}
