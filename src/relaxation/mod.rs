//! The semidefinite relaxation: words, monomial levels, moment matrices and the programme made of them.

pub mod level;
pub mod program;
