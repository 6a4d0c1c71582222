//! The simultaneous confidence region of a batch.

use super::interval::clopper_pearson;
use crate::counts::{Counts, Table};

/// Relative frequencies `n(b|x,y) / n(x,y)`.
pub fn frequencies(counts: &Counts) -> Table<f64> {
    map(counts, |n, rounds| n as f64 / rounds as f64)
}

/// Intervals `[low, high]`, `[x][y][b]`, that all hold at once except with probability `failure`, in `(0, 1)`.
///
/// The failure probability is shared equally by the intervals. With two outcomes the second interval is the mirror image of the
/// first, the same event, and counts once: `α = δ / XY`; otherwise `α = δ / XYB`, rounded down.
pub fn region(counts: &Counts, failure: f64) -> Table<[f64; 2]> {
    let settings = counts.table().len() * counts.table()[0].len();
    let outcomes = counts.table()[0][0].len();
    let intervals = if outcomes == 2 { settings } else { settings * outcomes };
    let alpha = (failure / intervals as f64).next_down();
    if outcomes == 2 {
        let mirrored = |values: &Vec<u64>| {
            let [low, high] = clopper_pearson(values[0], values.iter().sum(), alpha);
            vec![[low, high], [(1.0 - high).next_down().max(0.0), (1.0 - low).next_up().min(1.0)]]
        };
        return counts.table().iter().map(|table| table.iter().map(mirrored).collect()).collect();
    }
    map(counts, |n, rounds| clopper_pearson(n, rounds, alpha))
}

fn map<T>(counts: &Counts, of: impl Fn(u64, u64) -> T) -> Table<T> {
    let setting = |values: &Vec<u64>| {
        let rounds = values.iter().sum();
        values.iter().map(|n| of(*n, rounds)).collect()
    };
    counts.table().iter().map(|table| table.iter().map(setting).collect()).collect()
}
