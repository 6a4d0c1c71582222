//! Values from outside: published, handbook, derived by hand, or reached by explicit strategies. The source stands beside each.

mod attacks;
mod codes;
mod curves;
mod entropies;
mod extraction;
mod guessing;
mod intervals;
mod known;
mod leakage;
mod memory;
mod relaxation;
mod scores;
mod second;
