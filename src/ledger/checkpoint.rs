//! Checkpoints: the tree's size and root, signed, as text.
//!
//! The format is the open one of transparency logs, so that what others have written reads it as well: a checkpoint (C2SP tlog-checkpoint)
//! in a signed note (C2SP signed-note).
//!
//! ```text
//! bitassay/6f1c09d2                                   origin, which is also the key's name
//! 42                                                  number of leaves
//! 5dynenCmVZqdVZy3Ad7ZoqudgjqtL0lgz+Nw7/RgQyg=        root, base64
//!
//! — bitassay/6f1c09d2 3q2+7w…                         base64 of the key's identifier (4 bytes) and the signature (64 bytes)
//! ```
//!
//! Signed with Ed25519 (RFC 8032) are the bytes before the empty line. A key's identifier are the first four bytes of
//! SHA-256(name ‖ 0x0A ‖ 0x01 ‖ public key), and the key is written `name+identifier+base64(0x01 ‖ public key)`.

use std::{fmt, str::FromStr};

use base64::{Engine, engine::general_purpose::STANDARD};
use ed25519_dalek::{Signature, Signer as _, SigningKey, VerifyingKey};
use sha2::{Digest, Sha256};

use super::tree::Hash;

/// Byte that says Ed25519 in keys.
const ED25519: u8 = 1;
/// How a line with a signature begins.
const SIGNATURE: &str = "— ";
const PRIVATE: &str = "PRIVATE+KEY+";

/// What a checkpoint says.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Checkpoint {
    pub origin: String,
    pub size: u64,
    pub root: Hash,
}

/// Why a note or a key is not accepted.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum NoteError {
    #[error("no signed note: {0}")]
    Shape(&'static str),
    #[error("no key: {0}")]
    Key(&'static str),
    #[error("the checkpoint is not signed by {0}")]
    Unsigned(String),
    #[error("the signature of {0} is false")]
    False(String),
    #[error("the checkpoint is of {origin}, not of {expected}")]
    Origin { origin: String, expected: String },
}

impl Checkpoint {
    fn text(&self) -> String {
        format!("{}\n{}\n{}\n", self.origin, self.size, STANDARD.encode(self.root))
    }

    /// What a note says, whoever signed it.
    ///
    /// # Errors
    /// A text that is no checkpoint.
    pub fn read(note: &str) -> Result<Self, NoteError> {
        let (text, _) = split(note)?;
        let mut lines = text.lines();
        let origin = lines.next().filter(|origin| !origin.is_empty()).ok_or(NoteError::Shape("the first line names the origin"))?;
        let size = lines.next().and_then(|line| line.parse().ok().filter(|size: &u64| size.to_string() == line));
        let root = lines.next().and_then(|line| STANDARD.decode(line).ok()?.try_into().ok());
        Ok(Self {
            origin: origin.to_owned(),
            size: size.ok_or(NoteError::Shape("the second line is the number of leaves"))?,
            root: root.ok_or(NoteError::Shape("the third line is the root, base64"))?,
        })
    }
}

/// The signed text, up to the empty line, and the signatures after it.
fn split(note: &str) -> Result<(&str, &str), NoteError> {
    let at = note.rfind("\n\n").ok_or(NoteError::Shape("an empty line separates the signatures"))?;
    match (note.get(..=at), note.get(at + 2..)) {
        (Some(text), Some(signatures)) if signatures.ends_with('\n') => Ok((text, signatures)),
        _ => Err(NoteError::Shape("it ends with a line feed")),
    }
}

fn identifier(name: &str, key: &VerifyingKey) -> [u8; 4] {
    let digest: Hash = Sha256::new_with_prefix(name).chain_update([b'\n', ED25519]).chain_update(key.as_bytes()).finalize().into();
    let [a, b, c, d, ..] = digest;
    [a, b, c, d]
}

/// A name, the identifier and the key's 32 bytes, as keys are written.
fn read_key(text: &str) -> Result<(String, [u8; 4], [u8; 32]), NoteError> {
    // Base64 may hold a plus sign as well: it comes last.
    let mut parts = text.trim().splitn(3, '+');
    let (Some(name), Some(identifier), Some(key)) = (parts.next(), parts.next(), parts.next()) else {
        return Err(NoteError::Key("it is written name+identifier+key"));
    };
    if name.is_empty() || name.contains(char::is_whitespace) {
        return Err(NoteError::Key("its name is not empty and has no spaces"));
    }
    let identifier = hex::decode(identifier)
        .ok()
        .and_then(|bytes| bytes.try_into().ok())
        .ok_or(NoteError::Key("its identifier is 8 hexadecimal digits"))?;
    let bytes = STANDARD.decode(key).map_err(|_| NoteError::Key("it is base64"))?;
    match bytes.split_first() {
        Some((&ED25519, key)) => Ok((name.to_owned(), identifier, key.try_into().map_err(|_| NoteError::Key("it has 32 bytes"))?)),
        _ => Err(NoteError::Key("it is no Ed25519 key")),
    }
}

/// The public half: what an auditor checks with.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Verifier {
    name: String,
    key: VerifyingKey,
}

impl fmt::Display for Verifier {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        let key = [&[ED25519], &self.key.as_bytes()[..]].concat();
        write!(formatter, "{}+{}+{}", self.name, hex::encode(identifier(&self.name, &self.key)), STANDARD.encode(key))
    }
}

impl FromStr for Verifier {
    type Err = NoteError;

    fn from_str(text: &str) -> Result<Self, NoteError> {
        let (name, stated, key) = read_key(text)?;
        let key = VerifyingKey::from_bytes(&key).map_err(|_| NoteError::Key("it is no point of the curve"))?;
        if identifier(&name, &key) != stated {
            return Err(NoteError::Key("its identifier is another one's"));
        }
        Ok(Self { name, key })
    }
}

impl Verifier {
    /// The name of the key, which is the origin of its checkpoints.
    pub fn name(&self) -> &str {
        &self.name
    }

    /// The checkpoint in a note that is signed by this key.
    ///
    /// # Errors
    /// A note without a true signature by the key, or of another origin.
    pub fn confirm(&self, note: &str) -> Result<Checkpoint, NoteError> {
        let checkpoint = Checkpoint::read(note)?;
        let (text, signatures) = split(note)?;
        let ours = signatures.lines().find_map(|line| {
            let (name, signature) = line.strip_prefix(SIGNATURE)?.split_once(' ')?;
            let bytes = STANDARD.decode(signature).ok()?;
            let (id, signature) = bytes.split_at_checked(4)?;
            (name == self.name && id == identifier(&self.name, &self.key)).then(|| signature.to_vec())
        });
        let signature = ours.ok_or_else(|| NoteError::Unsigned(self.name.clone()))?;
        let signature = Signature::from_slice(&signature).map_err(|_| NoteError::False(self.name.clone()))?;
        self.key.verify_strict(text.as_bytes(), &signature).map_err(|_| NoteError::False(self.name.clone()))?;
        if checkpoint.origin != self.name {
            return Err(NoteError::Origin { origin: checkpoint.origin, expected: self.name.clone() });
        }
        Ok(checkpoint)
    }
}

/// The secret half.
pub struct Signer {
    name: String,
    key: SigningKey,
}

impl fmt::Debug for Signer {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        write!(formatter, "Signer({})", self.verifier())
    }
}

impl Signer {
    /// A key from 32 random bytes. Its name ends with the beginning of the public key's digest: another key has another name, and
    /// therefore never signs for the same origin.
    pub fn new(seed: &[u8; 32]) -> Self {
        let key = SigningKey::from_bytes(seed);
        let digest = hex::encode(Sha256::digest(key.verifying_key().as_bytes()));
        Self { name: format!("bitassay/{}", digest.get(..16).unwrap_or(&digest)), key }
    }

    /// Reads what [`Self::secret`] wrote.
    ///
    /// # Errors
    /// A text that is no key.
    pub fn read(text: &str) -> Result<Self, NoteError> {
        let text = text.trim().strip_prefix(PRIVATE).ok_or(NoteError::Key("a secret key begins with PRIVATE+KEY+"))?;
        let (name, stated, seed) = read_key(text)?;
        let key = SigningKey::from_bytes(&seed);
        if identifier(&name, &key.verifying_key()) != stated {
            return Err(NoteError::Key("its identifier is another one's"));
        }
        Ok(Self { name, key })
    }

    /// The key as it is kept in its file: the seed of RFC 8032 in the place of the public key.
    pub fn secret(&self) -> String {
        let key = [&[ED25519], &self.key.to_bytes()[..]].concat();
        format!("{PRIVATE}{}+{}+{}\n", self.name, hex::encode(identifier(&self.name, &self.key.verifying_key())), STANDARD.encode(key))
    }

    pub fn verifier(&self) -> Verifier {
        Verifier { name: self.name.clone(), key: self.key.verifying_key() }
    }

    /// A signed note for a tree.
    pub fn sign(&self, size: u64, root: Hash) -> String {
        let text = Checkpoint { origin: self.name.clone(), size, root }.text();
        let identifier = identifier(&self.name, &self.key.verifying_key());
        let signature = [&identifier[..], &self.key.sign(text.as_bytes()).to_bytes()].concat();
        format!("{text}\n{SIGNATURE}{} {}\n", self.name, STANDARD.encode(signature))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Key and note of the documentation of Go's `golang.org/x/mod/sumdb/note`, from memory.
    const KEY: &str = "PeterNeumann+c74f20a3+ARpc2QcUPDhMQegwxbzhKqiBfsVkmqq/LDE4izWy10TW";
    const NOTE: &str = "If you think cryptography is the answer to your problem,\nthen you don't know what your problem is.\n\n— PeterNeumann x08go/ZJkuBS9UG/SffcvIAQxVBtiFupLLr8pAcElZInNIuGUgYN1FFYC2pZSNXgKvqfqdngotpRZb6KE6RyyBwJnAM=\n";

    #[test]
    fn keys_and_signatures_are_those_of_the_format() {
        let verifier: Verifier = KEY.parse().unwrap();
        assert_eq!(verifier.to_string(), KEY);
        let (text, signatures) = split(NOTE).unwrap();
        let bytes = STANDARD.decode(signatures.trim().strip_prefix("— PeterNeumann ").unwrap()).unwrap();
        assert_eq!(bytes[..4], identifier("PeterNeumann", &verifier.key));
        verifier.key.verify_strict(text.as_bytes(), &Signature::from_slice(&bytes[4..]).unwrap()).unwrap();
        // No checkpoint, though signed.
        assert!(matches!(verifier.confirm(NOTE), Err(NoteError::Shape(_))));
    }

    #[test]
    fn a_note_holds_what_was_signed_and_nothing_else() {
        let signer = Signer::new(&[7; 32]);
        let verifier = signer.verifier();
        let note = signer.sign(42, [9; 32]);
        let checkpoint = Checkpoint { origin: verifier.name().to_owned(), size: 42, root: [9; 32] };
        assert_eq!(verifier.confirm(&note), Ok(checkpoint));
        assert!(matches!(verifier.confirm(&note.replace("\n42\n", "\n43\n")), Err(NoteError::False(_))));
        assert!(matches!(verifier.confirm(&note.replace("\n42\n", "\n042\n")), Err(NoteError::Shape(_))));
        assert!(matches!(Signer::new(&[8; 32]).verifier().confirm(&note), Err(NoteError::Unsigned(_))));
        let read = Signer::read(&signer.secret()).unwrap();
        assert_eq!(read.sign(42, [9; 32]), note);
        assert_eq!(verifier.to_string().parse(), Ok(verifier));
    }
}
