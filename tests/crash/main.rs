//! What the service keeps when it is killed, when the disk is full, and when somebody changes the database: the real server, as a process.
//!
//! `BITASSAY_KILLS=200 cargo test --test crash -- --nocapture` is the long form, and prints its figures.

#[path = "../api/client.rs"]
#[allow(dead_code, reason = "shared with the tests of the interface, which use all of it")]
mod client;
mod kill;
mod process;
mod restore;
mod storage;
mod tampering;
