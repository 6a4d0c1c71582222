//! Explicit attacks: the other side of a bound.
//!
//! A bound on the guessing probability holds for every model; an attack is a model. It says how often an adversary who built the devices *does*
//! guess the target's outcome, within the declared leakage and without a trace in the behaviour. The largest guessing probability lies between
//! the two, so what is between them is what a bound may give away, and a bound below an attack is a bug, always.
//!
//! **A model** draws a pure strategy with its weight, and the adversary knows which. A strategy is a unit vector for each preparation, a
//! measurement for each setting of the receiver and a carrier, a d-dimensional subspace, here in `d + 2` dimensions (`d + 1` if one
//! preparation leaks, `d` if none does; with fewer preparations than d, as many as there are preparations in the place of d).
//! More dimensions can only help an adversary, so what is found is an inner bound for that reason alone.
//!
//! **Column generation.** [`search`](self::attack) keeps a list of strategies. A linear programme mixes them as well as it can so that
//! the behaviour comes out (or lies in its intervals) and, where the leakage is limited on average, the mean leakage too (`master.rs`). Its
//! prices say what a further strategy is worth: its value, minus `ν·p`, minus `μ·leakage`. Strategies that are worth more than their price
//! are sought by alternating eigenvalue problems (`climb.rs`), from random starts, real and complex in turn, and from the strategies in use:
//!
//! - each state becomes the top eigenvector of what it is rewarded for, `Σ (−ν) M − μ N`; where the leakage holds for every emission, the best state
//!   with at most that leakage, by a search for the multiplier; where it is zero, the best state inside the carrier;
//! - a measurement with two outcomes becomes the projector on a positive part, which is the best there is; with more outcomes pairs
//!   of elements are improved in turn, with their sum held fixed, which may stop short of the best measurement: another reason why the result
//!   is an inner bound only;
//! - the carrier becomes the top-d eigenspace of `Σ μ_x ρ_x`, where the leakage has a price.
//!
//! The search ends when nothing better is found; that proves nothing about what may exist. It is deterministic for a given seed. The multipliers
//! of a witness are good prices to start from. They shorten the search several times over, and nothing rests on them.
//!
//! **What is reported** comes from the matrices alone: [`attained`](attained::attained) recomputes behaviour, leakage and guessing
//! probability of the model, checks that states are normalised, measurements complete and positive and carriers projectors of rank d, and
//! states how far the figures of an exact model near it may be from them. Limits of the leakage are kept with a margin, so they are obeyed
//! exactly. Intervals are too. A stated behaviour cannot be met exactly in floating point: the attack then has a *residual*, mostly 10⁻¹³, and is
//! compared with the bound over all behaviours within the residual of the stated one. The witness of a bound holds for every
//! behaviour, so that comparison is exact.
//!
//! The same search minimises the mean power entropy instead ([`objective::Objective`]): the objective is replaced by its tangent in every
//! step, which can only be exceeded.

pub mod attained;
mod climb;
mod master;
mod numbers;
pub mod objective;
pub mod report;
pub mod sandwich;
mod search;
pub mod strategy;

pub use search::{Attack, Effort, Hints, attack};
