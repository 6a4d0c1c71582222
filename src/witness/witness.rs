//! The witness document.

use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

/// A self-contained document of exact integers.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Witness {
    pub format: String,
}

impl Witness {
    /// The canonical bytes: compact JSON with the fields in the order of this type.
    pub fn canonical_json(&self) -> String {
        // Plain strings, integers and arrays: serialisation cannot fail.
        serde_json::to_string(self).unwrap_or_default()
    }

    /// `sha256:` and the digest of the canonical bytes, in lower-case hexadecimal.
    pub fn digest(&self) -> String {
        format!("sha256:{}", hex::encode(Sha256::digest(self.canonical_json())))
    }
}
