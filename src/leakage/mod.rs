//! Where a leakage figure comes from: weight outside the carrier, from what a laboratory can measure.
//!
//! One calculator a file. Each turns stated values, or counts with an exact confidence limit, into an upper bound on the weight `ε`
//! outside a carrier of a stated dimension, by the one signature of [`estimate::Calculator`]. [`budget`] adds them up.
//!
//! | source | carrier | bound on the weight outside |
//! |---|---|---|
//! | [`coherent`] pulse, mean photon number μ | lowest d Fock levels | `P(d, μ) = Σ_{k≥d} e^{−μ} μ^k / k!` |
//! | [`thermal`] light of one mode, mean μ | lowest d Fock levels | `(μ/(1+μ))^d` |
//! | [`g2`] at zero delay and mean n̄, any light | vacuum and one photon | `g² n̄² / 2` |
//! | [`coincidence`] probability `p_c` behind a beam splitter, any light | vacuum and one photon | `p_c / (2 η_A η_B)` |
//! | [`heralded`] pairs, thermal or Poissonian | vacuum and one photon | weight of two pairs or more, given the herald |
//! | [`vacuum`] weight, any light | vacuum | `1 − P(0) ≤ n̄` |
//! | [`overlap`] c of two pure states | the state half-way between | `(1 − c)/2` |
//! | [`side_mode`] of weight w | the side mode's vacuum | `w` |
//!
//! Every bound is rounded up: formulas that are rational are evaluated exactly and rounded once, the others carry an allowance for
//! the errors of the elementary functions ([`rounding`]). Weights far below the spacing of floating-point numbers near 1 keep their
//! digits, because no formula subtracts nearly equal numbers.

pub mod budget;
pub mod coherent;
pub mod coincidence;
pub mod estimate;
pub mod g2;
pub mod heralded;
pub mod measured;
pub mod overlap;
pub mod photons;
pub mod rounding;
pub mod side_mode;
pub mod thermal;
pub mod vacuum;
