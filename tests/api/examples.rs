//! `api/examples/`
