//! Who may do what: tokens, the roles they carry, and the keyring that recognises them.
//!
//! A token is 32 random bytes behind a prefix that makes it easy to find where it should not be. What is kept of it is its SHA-256
//! digest; with that much randomness in it, nothing slower is needed to keep the digest from being turned back.

use std::fmt;

use rand::{TryRng, rngs::SysRng};
use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};
use subtle::{Choice, ConditionallySelectable, ConstantTimeEq};
use uuid::Uuid;

use crate::{clock::Stamp, profile::RigName};

/// What every token begins with.
pub const PREFIX: &str = "bitassay_";
/// Random bytes in a token.
const BYTES: usize = 32;

/// What a token's holder may do.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Role {
    /// Posts batches of the rigs that the token names, and reads what became of them.
    Rig,
    /// Declares rigs, commits, and reads everything.
    Operator,
    /// Reads everything, changes nothing.
    Auditor,
}

impl Role {
    pub const ALL: [Self; 3] = [Self::Rig, Self::Operator, Self::Auditor];

    /// The word that the interface has for it.
    pub fn word(self) -> &'static str {
        match self {
            Self::Rig => "rig",
            Self::Operator => "operator",
            Self::Auditor => "auditor",
        }
    }
}

impl fmt::Display for Role {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        formatter.write_str(self.word())
    }
}

/// The token itself, as its holder has it. Neither kept nor logged: it has no `Debug`, and is read out once.
pub struct Secret(String);

impl Secret {
    /// A new token from the operating system's random numbers.
    ///
    /// # Errors
    /// The operating system's.
    pub fn generate() -> Result<Self, rand::rngs::SysError> {
        let mut bytes = [0; BYTES];
        SysRng.try_fill_bytes(&mut bytes)?;
        Ok(Self(format!("{PREFIX}{}", hex::encode(bytes))))
    }

    /// The text that the holder is given.
    pub fn reveal(&self) -> &str {
        &self.0
    }

    pub fn fingerprint(&self) -> Fingerprint {
        Fingerprint::of(&self.0)
    }
}

/// SHA-256 of a token's text: what is kept of it. Compares in constant time.
#[derive(Clone, Copy, Serialize, Deserialize)]
#[serde(try_from = "String", into = "String")]
pub struct Fingerprint([u8; 32]);

impl Fingerprint {
    pub fn of(text: &str) -> Self {
        Self(Sha256::digest(text.as_bytes()).into())
    }
}

impl ConstantTimeEq for Fingerprint {
    fn ct_eq(&self, other: &Self) -> Choice {
        self.0.ct_eq(&other.0)
    }
}

impl From<Fingerprint> for String {
    fn from(Fingerprint(bytes): Fingerprint) -> Self {
        format!("sha256:{}", hex::encode(bytes))
    }
}

/// The text is no digest.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error("not a digest: sha256: and 64 hexadecimal digits")]
pub struct NoFingerprint;

impl TryFrom<String> for Fingerprint {
    type Error = NoFingerprint;

    fn try_from(text: String) -> Result<Self, NoFingerprint> {
        let mut bytes = [0; 32];
        let digits = text.strip_prefix("sha256:").ok_or(NoFingerprint)?;
        hex::decode_to_slice(digits, &mut bytes).map_err(|_| NoFingerprint)?;
        Ok(Self(bytes))
    }
}

/// What is known of a token.
#[derive(Clone, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Token {
    /// The name by which it is listed and revoked; no secret.
    pub token: Uuid,
    pub fingerprint: Fingerprint,
    pub role: Role,
    /// The rigs that a rig's token is for; empty for the other roles.
    pub rigs: Vec<RigName>,
    /// What its creator noted.
    pub label: Option<String>,
    /// The first moment at which it is no longer taken.
    pub expires_at: Option<Stamp>,
    pub recorded_at: Stamp,
}

/// One step in a token's life, as it is kept.
#[derive(Clone, Serialize, Deserialize)]
#[serde(tag = "change", rename_all = "lowercase")]
pub enum Change {
    Created(Token),
    Revoked { token: Uuid, recorded_at: Stamp },
}

impl Change {
    pub fn token(&self) -> Uuid {
        match self {
            Self::Created(Token { token, .. }) | Self::Revoked { token, .. } => *token,
        }
    }

    pub fn recorded_at(&self) -> Stamp {
        match self {
            Self::Created(Token { recorded_at, .. }) | Self::Revoked { recorded_at, .. } => *recorded_at,
        }
    }

    /// The word in the document's `change`.
    pub fn kind(&self) -> &'static str {
        match self {
            Self::Created(_) => "created",
            Self::Revoked { .. } => "revoked",
        }
    }
}

/// A token, and when it was revoked, if it was.
#[derive(Clone)]
pub struct Key {
    pub token: Token,
    pub revoked_at: Option<Stamp>,
}

impl Key {
    /// Whether the token is taken at a time, and if not, why.
    ///
    /// # Errors
    /// A revoked or an expired token.
    pub fn check(&self, now: Stamp) -> Result<(), Unrecognised> {
        if self.revoked_at.is_some() {
            return Err(Unrecognised::Revoked);
        }
        if self.token.expires_at.is_some_and(|end| now >= end) { Err(Unrecognised::Expired) } else { Ok(()) }
    }
}

/// Why a token is not taken.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
pub enum Unrecognised {
    #[error("the token is not known here")]
    Unknown,
    #[error("the token has expired")]
    Expired,
    #[error("the token was revoked")]
    Revoked,
}

/// All tokens there ever were.
#[derive(Clone, Default)]
pub struct Keyring {
    keys: Vec<Key>,
    /// How many changes it was made from.
    changes: usize,
}

impl Keyring {
    /// From all changes, oldest first.
    pub fn of(changes: impl IntoIterator<Item = Change>) -> Self {
        let mut ring = Self::default();
        for change in changes {
            ring.changes += 1;
            match change {
                Change::Created(token) => ring.keys.push(Key { token, revoked_at: None }),
                Change::Revoked { token, recorded_at } => {
                    ring.keys.iter_mut().filter(|key| key.token.token == token).for_each(|key| key.revoked_at = Some(recorded_at));
                }
            }
        }
        ring
    }

    /// Whether no token was ever created.
    pub fn is_empty(&self) -> bool {
        self.keys.is_empty()
    }

    /// How many changes it was made from.
    pub fn changes(&self) -> usize {
        self.changes
    }

    pub fn keys(&self) -> &[Key] {
        &self.keys
    }

    /// The token of a text, if it is taken at this time.
    ///
    /// All fingerprints are compared, each in constant time: how long it takes tells nothing but how many there are.
    ///
    /// # Errors
    /// See [`Unrecognised`].
    pub fn recognise(&self, text: &str, now: Stamp) -> Result<&Token, Unrecognised> {
        let presented = Fingerprint::of(text);
        let mut found = u64::MAX;
        for (i, key) in (0..).zip(&self.keys) {
            found.conditional_assign(&i, key.token.fingerprint.ct_eq(&presented));
        }
        let key = usize::try_from(found).ok().and_then(|i| self.keys.get(i)).ok_or(Unrecognised::Unknown)?;
        key.check(now).map(|()| &key.token)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(text: &str) -> Stamp {
        text.parse().unwrap()
    }

    fn created(secret: &Secret, expires_at: Option<Stamp>) -> Token {
        let recorded_at = at("2026-06-01T00:00:00Z");
        Token {
            token: Uuid::now_v7(),
            fingerprint: secret.fingerprint(),
            role: Role::Operator,
            rigs: vec![],
            label: None,
            expires_at,
            recorded_at,
        }
    }

    #[test]
    fn a_token_is_recognised_until_it_expires_or_is_revoked() {
        let [first, second, stranger] = [(); 3].map(|()| Secret::generate().unwrap());
        let end = at("2026-07-01T00:00:00Z");
        let (lasting, ending) = (created(&first, None), created(&second, Some(end)));
        let (id, other) = (lasting.token, ending.token);
        let mut changes = vec![Change::Created(lasting), Change::Created(ending)];
        let ring = Keyring::of(changes.clone());
        let day = at("2026-06-30T23:59:59.999999Z");
        assert_eq!(ring.recognise(first.reveal(), day).map(|token| token.token), Ok(id));
        assert_eq!(ring.recognise(second.reveal(), day).map(|token| token.token), Ok(other));
        assert_eq!(ring.recognise(second.reveal(), end).map(|token| token.token), Err(Unrecognised::Expired));
        for text in ["", PREFIX, stranger.reveal(), &first.reveal()[..first.reveal().len() - 1], &format!("{} ", first.reveal())] {
            assert_eq!(ring.recognise(text, day).map(|token| token.token), Err(Unrecognised::Unknown));
        }
        changes.push(Change::Revoked { token: id, recorded_at: day });
        let ring = Keyring::of(changes);
        assert_eq!(ring.recognise(first.reveal(), day).map(|token| token.token), Err(Unrecognised::Revoked));
        assert!(ring.recognise(second.reveal(), day).is_ok());
        assert!(!ring.is_empty() && Keyring::default().is_empty());
    }

    #[test]
    fn tokens_differ_and_are_as_long_as_they_should_be() {
        let [first, second] = [(); 2].map(|()| Secret::generate().unwrap());
        assert_ne!(first.reveal(), second.reveal());
        assert_eq!(first.reveal().len(), PREFIX.len() + 64);
    }

    #[test]
    fn a_change_is_read_back_and_holds_no_secret() {
        let secret = Secret::generate().unwrap();
        let text = serde_json::to_string(&Change::Created(created(&secret, None))).unwrap();
        assert!(!text.contains(&secret.reveal()[PREFIX.len()..]), "{text}");
        let again: Change = serde_json::from_str(&text).unwrap();
        assert_eq!(serde_json::to_string(&again).unwrap(), text);
    }
}
