//! What must hold whatever the numbers are.

mod coverage;
mod monotone;
mod relabelling;
mod rig;
mod rounds;
mod witnesses;
