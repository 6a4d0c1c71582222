//! How much of the service one client may take.

use std::{num::NonZeroU32, time::Duration};

/// Limits of connections and requests.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Limits {
    /// Connections at a time. A few more are taken, but told no more than whether the service is well.
    pub connections: usize,
    /// How long a client may take over the head of a request, and how long a kept connection may lie idle.
    pub head: Duration,
    /// How long a client may take to send a body.
    pub body: Duration,
    /// How long a client may take no byte of its answer.
    pub answer: Duration,
    /// Requests a second of one token, in the long run; of one peer where there is no token.
    pub rate: NonZeroU32,
    /// Requests at once of one token or peer, above the rate.
    pub burst: NonZeroU32,
}

impl Default for Limits {
    fn default() -> Self {
        let seconds = Duration::from_secs;
        let number = |number| NonZeroU32::new(number).unwrap_or(NonZeroU32::MIN);
        Self { connections: 2000, head: seconds(10), body: seconds(30), answer: seconds(30), rate: number(200), burst: number(2000) }
    }
}
