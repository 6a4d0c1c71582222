//! The semidefinite relaxation: words, monomial levels, moment matrices and the programme made of them.

pub mod cells;
pub mod cost;
pub mod level;
pub mod moments;
pub mod parity;
pub mod program;
pub mod question;
pub mod word;
