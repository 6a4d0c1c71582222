//! What must hold whatever the numbers are.

mod accounts;
mod comparison;
mod coverage;
mod models;
mod monotone;
mod relabelling;
mod rig;
mod rounds;
mod witnesses;
