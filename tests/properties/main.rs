//! What must hold whatever the numbers are.

mod monotone;
mod relabelling;
mod rig;
mod rounds;
mod witnesses;
