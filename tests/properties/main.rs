//! What must hold whatever the numbers are.

mod accounts;
mod coverage;
mod kept;
mod models;
mod monotone;
mod relabelling;
mod rig;
mod rounds;
mod sandwich;
mod witnesses;
