//! Extraction length.

use bitassay::entropy::extraction::{extractable, hashing_cost};

/// Leftover hash lemma, IEEE Trans. Inf. Theory 57, 5524 (arXiv:1002.2436), in the conservative form without +2: 581 295 000 bits of
/// min-entropy at hashing failure 1e-10 give 581 294 933.
#[test]
fn hash_length() {
    assert_eq!(extractable(581_295_000.0, &[hashing_cost(1e-10)]), 581_294_933);
}
