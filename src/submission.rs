//! What makes a repeated post recognisable.

use std::fmt;

/// The name that a rig gives to one batch, the same each time the batch is sent: 1 to 255 visible ASCII characters.
#[derive(Debug, Clone, PartialEq, Eq, Hash)]
pub struct IdempotencyKey(String);

/// The text cannot be an idempotency key.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error("an idempotency key has 1 to 255 visible ASCII characters")]
pub struct NoKey;

impl TryFrom<&str> for IdempotencyKey {
    type Error = NoKey;

    fn try_from(text: &str) -> Result<Self, NoKey> {
        let fits = (1..=255).contains(&text.len()) && text.bytes().all(|byte| byte.is_ascii_graphic());
        if fits { Ok(Self(text.to_owned())) } else { Err(NoKey) }
    }
}

impl fmt::Display for IdempotencyKey {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        formatter.write_str(&self.0)
    }
}

impl IdempotencyKey {
    pub fn as_str(&self) -> &str {
        &self.0
    }
}

/// A key, and the digest of the batch that it stands for.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Submission {
    pub key: IdempotencyKey,
    /// `sha256:` digest of everything that was posted.
    pub body_digest: String,
}
