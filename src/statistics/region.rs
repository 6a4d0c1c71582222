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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::{counts::fits, scenario::Geometry, statistics::interval::ln_lower_tail_bound};

    fn geometry(table: &Table<u64>) -> Geometry {
        Geometry { preparations: table.len(), measurements: table[0].len(), outcomes: table[0][0].len(), carrier_dimension: 2 }
    }

    fn counts(table: Table<u64>) -> Counts {
        let geometry = geometry(&table);
        Counts::try_new(table, geometry).unwrap()
    }

    /// Every end is missed with the share of the failure probability that it was given, no more and hardly less.
    fn shares(counts: &Counts, failure: f64, ends: f64) {
        let region = region(counts, failure);
        assert!(fits(&region, geometry(counts.table())));
        for (intervals, values) in region.iter().flatten().zip(counts.table().iter().flatten()) {
            let n = values.iter().sum();
            for ([low, high], k) in intervals.iter().zip(values) {
                let spent = ln_lower_tail_bound(*k, n, *high).exp() + ln_lower_tail_bound(n - k, n, 1.0 - low).exp();
                let share = 2.0 * failure / ends;
                assert!(spent <= share * (1.0 + 1e-9) && spent > 0.999 * share, "{k} of {n}: {spent:e} {share:e}");
            }
        }
    }

    #[test]
    fn the_failure_probability_is_shared_by_all_ends() {
        // Two outcomes: three preparations, two measurements, an interval with two ends at each.
        shares(&counts(vec![vec![vec![70, 30], vec![400, 600]]; 3]), 1e-6, 12.0);
        // Three outcomes: an interval each.
        shares(&counts(vec![vec![vec![70, 20, 10], vec![400, 500, 100]]; 3]), 1e-6, 36.0);
    }

    #[test]
    fn frequencies_are_shares_of_their_setting() {
        assert_eq!(frequencies(&counts(vec![vec![vec![30, 10], vec![1, 7]]])), vec![vec![vec![0.75, 0.25], vec![0.125, 0.875]]]);
    }
}
