//! A cover of the simplex of outcome distributions by smaller simplices.
//!
//! A cell is cut in two by a point on one of its edges, which leaves no gap, so a list of cuts is a cover by construction. The list is in
//! preorder: a cut is followed by the lists of the cell that lost the edge's first end, then of the one that lost its second; `null` ends
//! a branch and is a cell.

use nalgebra::{DMatrix, DVector};
use num_bigint::BigInt;
use num_rational::BigRational;
use num_traits::{One, ToPrimitive, Zero};
use serde::{Deserialize, Deserializer, Serialize, Serializer};

/// Bits after the binary point of the place of a cut along its edge.
pub const CUT_BITS: u32 = 12;
/// Most cells of a cover that is made here.
pub const COVER_CELLS: usize = 16;
/// Most cells of a cover.
pub const MAX_CELLS: usize = 64;

/// A cut of an edge at `first + (second − first) · at / 2¹²`. On the wire `[first, second, at]`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub struct Cut {
    /// Numbers of the edge's ends among the cell's vertices.
    pub first: usize,
    pub second: usize,
    /// Strictly between 0 and 2¹².
    pub at: u32,
}

impl Serialize for Cut {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        (self.first, self.second, self.at).serialize(serializer)
    }
}

impl<'de> Deserialize<'de> for Cut {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let (first, second, at) = Deserialize::deserialize(deserializer)?;
        Ok(Self { first, second, at })
    }
}

/// A simplex: one vertex per outcome, each a distribution over the outcomes.
#[derive(Debug, Clone, PartialEq)]
pub struct Cell {
    pub vertices: Vec<Vec<BigRational>>,
}

impl Cell {
    /// The whole simplex, whose vertices are the certain outcomes.
    pub fn whole(outcomes: usize) -> Self {
        let vertex = |b: usize| (0..outcomes).map(|other| if other == b { BigRational::one() } else { BigRational::zero() }).collect();
        Self { vertices: (0..outcomes).map(vertex).collect() }
    }

    /// Vertices as columns, in approximate numbers.
    pub fn matrix(&self) -> DMatrix<f64> {
        let side = self.vertices.len();
        DMatrix::from_fn(side, side, |b, j| self.vertices[j][b].to_f64().unwrap_or(0.0))
    }

    /// The cut of the edge that matters most to a distribution, at its place along the edge; `None` if the distribution lies outside the
    /// cell or close to a vertex.
    fn cut_towards(&self, point: &DVector<f64>) -> Option<Cut> {
        let coordinates = self.matrix().try_inverse()? * point;
        if coordinates.min() < -NEAR {
            return None;
        }
        let first = coordinates.imax();
        let others = (0..coordinates.len()).filter(|j| *j != first);
        let second = others.max_by(|one, other| coordinates[*one].total_cmp(&coordinates[*other]))?;
        let share = coordinates[second] / (coordinates[first] + coordinates[second]);
        let at = (share * f64::from(1 << CUT_BITS)).round() as u32;
        (share > NEAR && at > 0).then_some(Cut { first, second, at })
    }

    /// The two cells of a cut; `None` if the cut does not lie inside an edge of this cell.
    pub fn cut(&self, cut: Cut) -> Option<[Self; 2]> {
        let Cut { first, second, at } = cut;
        if first == second || at == 0 || at >= 1 << CUT_BITS {
            return None;
        }
        let (start, end) = (self.vertices.get(first)?, self.vertices.get(second)?);
        let share = BigRational::new(BigInt::from(at), BigInt::one() << CUT_BITS);
        let point: Vec<BigRational> = start.iter().zip(end).map(|(s, e)| s + (e - s) * &share).collect();
        let mut halves = [self.clone(), self.clone()];
        halves[0].vertices[first].clone_from(&point);
        halves[1].vertices[second] = point;
        Some(halves)
    }
}

/// Shares below this of an edge or a simplex are not told apart when a cover is made.
const NEAR: f64 = 1e-3;

/// A cover with a vertex close to each of these distributions, as far as the number of cells allows; the first are served first.
pub fn cover(outcomes: usize, wanted: &[DVector<f64>]) -> Vec<Option<Cut>> {
    let mut cuts = vec![None];
    for point in wanted {
        // Each cut takes the point to a face of one dimension less.
        for _ in 1..outcomes {
            let found = cells(outcomes, &cuts).unwrap_or_default();
            let cut = found.iter().enumerate().find_map(|(number, cell)| Some((number, cell.cut_towards(point)?)));
            let Some((number, cut)) = cut.filter(|_| found.len() < COVER_CELLS) else { break };
            let places = cuts.iter().enumerate().filter(|(_, cut)| cut.is_none()).map(|(place, _)| place);
            if let Some(place) = places.into_iter().nth(number) {
                cuts.splice(place..=place, [Some(cut), None, None]);
            }
        }
    }
    cuts
}

/// The cells of a cover, in the order of their `null`s; `None` if the list is not a cover or has too many cells.
pub fn cells(outcomes: usize, cuts: &[Option<Cut>]) -> Option<Vec<Cell>> {
    let (mut cells, mut open) = (Vec::new(), vec![Cell::whole(outcomes)]);
    for entry in cuts {
        let cell = open.pop()?;
        match entry {
            None => cells.push(cell),
            Some(cut) => {
                let [without_first, without_second] = cell.cut(*cut)?;
                open.push(without_second);
                open.push(without_first);
            }
        }
        if cells.len() + open.len() > MAX_CELLS {
            return None;
        }
    }
    (open.is_empty() && !cells.is_empty()).then_some(cells)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn ratio(n: i64, d: i64) -> BigRational {
        BigRational::new(n.into(), d.into())
    }

    #[test]
    fn cuts_of_an_interval_leave_no_gap() {
        // Vertices of two outcomes are (1, 0) and (0, 1); the first cut is at p(0) = 1/4, the next one in what lies above it.
        let cut = |at| Some(Cut { first: 0, second: 1, at });
        let list = [cut(3 << 10), None, cut(2 << 10), None, None];
        let found = cells(2, &list).unwrap();
        let ends: Vec<[BigRational; 2]> = found.iter().map(|cell| [0, 1].map(|i| cell.vertices[i][0].clone())).collect();
        assert_eq!(ends, [[ratio(1, 4), ratio(0, 1)], [ratio(5, 8), ratio(1, 4)], [ratio(1, 1), ratio(5, 8)]]);
    }

    #[test]
    fn lists_that_are_no_cover_are_refused() {
        let cut = |first, second, at| Some(Cut { first, second, at });
        for list in [
            vec![],
            vec![None, None],
            vec![cut(0, 1, 9), None],
            vec![cut(0, 1, 0), None, None],
            vec![cut(0, 1, 1 << CUT_BITS), None, None],
            vec![cut(0, 0, 9), None, None],
            vec![cut(0, 2, 9), None, None],
        ] {
            assert_eq!(cells(2, &list), None, "{list:?}");
        }
        assert!(cells(2, &[None]).is_some());
    }
}
