//! Integer tallies `n(b|x,y)` of one batch, and behaviours `p(b|x,y)` stated in their place.

use serde::Serialize;
use sha2::{Digest, Sha256};

use crate::{
    fault::Fault,
    scenario::{Geometry, Setting},
};

/// Largest number of rounds in a batch: integers up to here are exact in `f64`, which the statistics rely on.
pub const MAX_ROUNDS: u64 = 1 << 53;

/// A table indexed `[x][y][b]`.
pub type Table<T> = Vec<Vec<Vec<T>>>;

/// Checks that a table has one `[y][b]` table per preparation, and so on.
fn check_shape<T>(table: &Table<T>, geometry: Geometry) -> Result<(), Fault> {
    let Geometry { preparations, measurements, outcomes, .. } = geometry;
    let same = |found: usize, wanted: usize, what: &str, pointer: String| {
        if found == wanted { Ok(()) } else { Err(Fault::new(pointer, format!("needs one entry per {what}: {wanted}, has {found}"))) }
    };
    same(table.len(), preparations, "preparation", String::new())?;
    for (x, per_measurement) in table.iter().enumerate() {
        same(per_measurement.len(), measurements, "measurement", format!("/{x}"))?;
        for (y, per_outcome) in per_measurement.iter().enumerate() {
            same(per_outcome.len(), outcomes, "outcome", format!("/{x}/{y}"))?;
        }
    }
    Ok(())
}

/// Whether a table has the shape of a geometry.
pub fn fits<T>(table: &Table<T>, geometry: Geometry) -> bool {
    check_shape(table, geometry).is_ok()
}

/// Counts of one batch: every setting was used at least once, and the total is at most [`MAX_ROUNDS`].
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(transparent)]
pub struct Counts {
    table: Table<u64>,
}

impl Counts {
    /// # Errors
    /// A shape that does not fit the geometry, a setting without rounds, or too many rounds; pointers are relative
    /// to the table.
    pub fn try_new(table: Table<u64>, geometry: Geometry) -> Result<Self, Fault> {
        check_shape(&table, geometry)?;
        let mut total = 0u64;
        for setting in geometry.settings() {
            let mut rounds = 0u64;
            for (b, n) in table[setting.x][setting.y].iter().enumerate() {
                rounds = rounds.saturating_add(*n);
                total = total.saturating_add(*n);
                if total > MAX_ROUNDS {
                    let pointer = format!("/{}/{}/{b}", setting.x, setting.y);
                    return Err(Fault::new(pointer, format!("a batch holds at most {MAX_ROUNDS} rounds")));
                }
            }
            if rounds == 0 {
                return Err(Fault::new(format!("/{}/{}", setting.x, setting.y), "this setting has no rounds"));
            }
        }
        Ok(Self { table })
    }

    pub fn table(&self) -> &Table<u64> {
        &self.table
    }

    /// Counts of each outcome at one setting.
    pub fn at(&self, setting: Setting) -> &[u64] {
        &self.table[setting.x][setting.y]
    }

    /// Rounds `n_{xy}` at one setting.
    pub fn rounds_at(&self, setting: Setting) -> u64 {
        self.at(setting).iter().sum()
    }

    /// Rounds of the whole batch.
    pub fn total(&self) -> u64 {
        self.table.iter().flatten().flatten().sum()
    }

    /// `sha256:` and the digest, in lower-case hexadecimal, of the canonical bytes: the ASCII line
    /// `bitassay counts 1\n`, then X, Y, B and the counts in `[x][y][b]` order, each as an eight-byte big-endian
    /// integer.
    pub fn digest(&self) -> String {
        let mut hasher = Sha256::new();
        hasher.update(b"bitassay counts 1\n");
        let sizes = [self.table.len(), self.table[0].len(), self.table[0][0].len()];
        for size in sizes {
            hasher.update((size as u64).to_be_bytes());
        }
        for n in self.table.iter().flatten().flatten() {
            hasher.update(n.to_be_bytes());
        }
        format!("sha256:{}", hex::encode(hasher.finalize()))
    }
}

/// How far the outcome probabilities of a stated behaviour may miss 1 at a setting.
///
/// Values written with a few decimals do not add up exactly; the last outcome takes up the difference.
pub const NORMALISATION_SLACK: f64 = 1e-6;

/// A behaviour `p(b|x,y)` with probabilities in `[0, 1]` that add up to 1 at every setting.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(transparent)]
pub struct Behaviour {
    table: Table<f64>,
}

impl Behaviour {
    /// # Errors
    /// A shape that does not fit the geometry, a value outside `[0, 1]`, or a setting whose probabilities miss 1 by
    /// more than [`NORMALISATION_SLACK`]; pointers are relative to the table.
    pub fn try_new(table: Table<f64>, geometry: Geometry) -> Result<Self, Fault> {
        check_shape(&table, geometry)?;
        for setting in geometry.settings() {
            let Setting { x, y } = setting;
            for (b, p) in table[x][y].iter().enumerate() {
                if !(0.0..=1.0).contains(p) {
                    return Err(Fault::new(format!("/{x}/{y}/{b}"), format!("a probability is from 0 to 1, is {p}")));
                }
            }
            let sum: f64 = table[x][y].iter().sum();
            if (sum - 1.0).abs() > NORMALISATION_SLACK {
                return Err(Fault::new(format!("/{x}/{y}"), format!("the probabilities of a setting add up to 1, not to {sum}")));
            }
        }
        Ok(Self { table })
    }

    pub fn table(&self) -> &Table<f64> {
        &self.table
    }

    pub fn at(&self, setting: Setting) -> &[f64] {
        &self.table[setting.x][setting.y]
    }
}

/// Checks that a setting distribution `[x][y]` has one positive probability per setting, and that they add up to 1 up to `slack`.
///
/// # Errors
/// The first entry or row that is wrong; pointers are relative to the table.
pub fn check_distribution(distribution: &[Vec<f64>], geometry: Geometry, slack: f64) -> Result<(), Fault> {
    let Geometry { preparations, measurements, .. } = geometry;
    if distribution.len() != preparations {
        let detail = format!("needs one row per preparation: {preparations}, has {}", distribution.len());
        return Err(Fault::new("", detail));
    }
    for (x, row) in distribution.iter().enumerate() {
        if row.len() != measurements {
            let detail = format!("needs one probability per measurement: {measurements}, has {}", row.len());
            return Err(Fault::new(format!("/{x}"), detail));
        }
        if let Some(y) = row.iter().position(|p| !(*p > 0.0 && *p <= 1.0)) {
            return Err(Fault::new(format!("/{x}/{y}"), format!("a setting's probability is above 0 and at most 1, is {}", row[y])));
        }
    }
    let sum: f64 = distribution.iter().flatten().sum();
    if (sum - 1.0).abs() > slack {
        return Err(Fault::new("", format!("the probabilities of all settings add up to 1, not to {sum}")));
    }
    Ok(())
}
