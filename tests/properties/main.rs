//! What must hold whatever the numbers are.

mod accounts;
mod comparison;
mod coverage;
mod forecasts;
mod kept;
mod models;
mod monotone;
mod relabelling;
mod rig;
mod rounds;
mod sandwich;
mod witnesses;
