//! What is varied, and the grid of values it takes.

use serde::{Deserialize, Serialize};

use crate::{counts::MAX_ROUNDS, fault::Fault};

/// Most points of a grid.
pub const MAX_POINTS: usize = 500;

/// How the points of a grid are spaced.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum Spacing {
    Linear,
    Logarithmic,
}

/// A grid with both ends included.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Grid {
    pub from: f64,
    pub to: f64,
    /// From 2 to 500.
    pub points: usize,
    /// By default logarithmic for leakage and rounds, and linear for visibility.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub spacing: Option<Spacing>,
}

/// The quantity that is varied; everything else stays as the request says.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum Sweep {
    /// The leakage of every preparation, from 0 to 1.
    Leakage(Grid),
    /// The weight of the behaviour in a mixture with white noise, from 0 to 1.
    Visibility(Grid),
    /// All rounds of a batch, rounded to whole numbers.
    Rounds(Grid),
}

/// The name of the quantity that is varied.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(rename_all = "kebab-case")]
pub enum Swept {
    Leakage,
    Visibility,
    Rounds,
}

impl Swept {
    pub fn name(self) -> &'static str {
        match self {
            Self::Leakage => "leakage",
            Self::Visibility => "visibility",
            Self::Rounds => "rounds",
        }
    }
}

impl Sweep {
    pub fn swept(&self) -> Swept {
        match self {
            Self::Leakage(_) => Swept::Leakage,
            Self::Visibility(_) => Swept::Visibility,
            Self::Rounds(_) => Swept::Rounds,
        }
    }

    fn grid(&self) -> &Grid {
        match self {
            Self::Leakage(grid) | Self::Visibility(grid) | Self::Rounds(grid) => grid,
        }
    }

    pub fn spacing(&self) -> Spacing {
        self.grid().spacing.unwrap_or(match self.swept() {
            Swept::Leakage | Swept::Rounds => Spacing::Logarithmic,
            Swept::Visibility => Spacing::Linear,
        })
    }

    /// The values of the grid, ascending; numbers of rounds that coincide after rounding stand once.
    ///
    /// # Errors
    /// Ends out of range or in the wrong order, too few or too many points; pointers begin with the name of the quantity.
    pub fn values(&self) -> Result<Vec<f64>, Fault> {
        let Grid { from, to, points, .. } = *self.grid();
        let name = self.swept().name();
        let (low, high) = match self.swept() {
            Swept::Leakage | Swept::Visibility => (0.0, 1.0),
            Swept::Rounds => (1.0, MAX_ROUNDS as f64),
        };
        for (end, value) in [("from", from), ("to", to)] {
            if !(low..=high).contains(&value) {
                return Err(Fault::new(format!("/{name}/{end}"), format!("{name} is from {low} to {high}, is {value}")));
            }
        }
        if from >= to {
            return Err(Fault::new(format!("/{name}/to"), "has to be above \"from\""));
        }
        if !(2..=MAX_POINTS).contains(&points) {
            return Err(Fault::new(format!("/{name}/points"), format!("a grid has 2 to {MAX_POINTS} points, not {points}")));
        }
        let logarithmic = self.spacing() == Spacing::Logarithmic;
        if logarithmic && from == 0.0 {
            return Err(Fault::new(format!("/{name}/from"), "a logarithmic grid begins above 0; linear spacing may begin at 0"));
        }
        let last = points - 1;
        let inner = |i: usize| {
            let share = i as f64 / last as f64;
            if logarithmic { from * (to / from).powf(share) } else { from + (to - from) * share }
        };
        let value = |i: usize| {
            if i == 0 {
                from
            } else if i == last {
                to
            } else {
                short(inner(i).clamp(from, to))
            }
        };
        let mut values: Vec<f64> = (0..points).map(value).collect();
        if self.swept() == Swept::Rounds {
            values.iter_mut().for_each(|value| *value = value.round());
        }
        values.dedup();
        Ok(values)
    }
}

/// The value with nine significant digits: a figure that people read, and copy into other documents.
fn short(value: f64) -> f64 {
    format!("{value:.8e}").parse().unwrap_or(value)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn grid(from: f64, to: f64, points: usize) -> Grid {
        Grid { from, to, points, spacing: None }
    }

    #[test]
    fn both_ends_and_what_lies_between() {
        assert_eq!(Sweep::Leakage(grid(1e-4, 1e-2, 3)).values().unwrap(), [1e-4, 1e-3, 1e-2]);
        assert_eq!(Sweep::Visibility(grid(0.9, 1.0, 3)).values().unwrap(), [0.9, 0.95, 1.0]);
        assert_eq!(Sweep::Rounds(grid(1.0, 4.0, 9)).values().unwrap(), [1.0, 2.0, 3.0, 4.0]);
    }

    #[test]
    fn what_is_no_grid_is_placed() {
        let linear = Grid { spacing: Some(Spacing::Linear), ..grid(0.0, 0.1, 3) };
        assert_eq!(Sweep::Leakage(linear).values().unwrap(), [0.0, 0.05, 0.1]);
        for (sweep, pointer) in [
            (Sweep::Leakage(grid(0.0, 0.1, 3)), "/leakage/from"),
            (Sweep::Leakage(grid(0.1, 1.1, 3)), "/leakage/to"),
            (Sweep::Leakage(grid(0.1, 0.1, 3)), "/leakage/to"),
            (Sweep::Leakage(grid(f64::NAN, 0.1, 3)), "/leakage/from"),
            (Sweep::Visibility(grid(0.1, 0.2, 1)), "/visibility/points"),
            (Sweep::Visibility(grid(0.1, 0.2, 501)), "/visibility/points"),
            (Sweep::Rounds(grid(0.5, 10.0, 3)), "/rounds/from"),
        ] {
            assert_eq!(sweep.values().unwrap_err().pointer, pointer, "{sweep:?}");
        }
    }
}
