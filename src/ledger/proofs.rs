//! Proofs from the stored tree: that an entry is in it, and that a smaller tree is its beginning.
//!
//! Which nodes a proof consists of, and how it is checked, is `ct-merkle`'s business; here they are found.

use ct_merkle::{ConsistencyProof, InclusionProof, RootHash, indices_for_consistency_proof, indices_for_inclusion_proof};
use sha2::Sha256;
use sqlx::SqliteConnection;

use super::{
    LedgerError,
    history::History,
    tree::{Hash, node, parent_hash},
};

impl History {
    /// Number of entries.
    ///
    /// # Errors
    /// The database's.
    pub async fn entries(&self) -> Result<u64, LedgerError> {
        size(&mut *self.pool.acquire().await?).await
    }

    /// The line of an entry.
    ///
    /// # Errors
    /// The database's.
    pub async fn leaf(&self, index: u64) -> Result<Option<String>, LedgerError> {
        let Ok(index) = i64::try_from(index) else { return Ok(None) };
        let sql = "SELECT entry FROM tree_leaves WHERE leaf = ?";
        Ok(sqlx::query_scalar(sql).bind(index).fetch_optional(&self.pool).await?)
    }

    /// Index and line of the entry of a subject.
    ///
    /// # Errors
    /// The database's.
    pub async fn leaf_of(&self, kind: &str, subject: &str) -> Result<Option<(u64, String)>, LedgerError> {
        let sql = "SELECT leaf, entry FROM tree_leaves WHERE kind = ? AND subject = ?";
        let row: Option<(i64, String)> = sqlx::query_as(sql).bind(kind).bind(subject).fetch_optional(&self.pool).await?;
        let index = |leaf| u64::try_from(leaf).map_err(|_| LedgerError::OutOfRange { what: "index" });
        row.map(|(leaf, line)| Ok((index(leaf)?, line))).transpose()
    }

    /// That an entry is in the tree of so many entries; `None` if the ledger has fewer.
    ///
    /// # Errors
    /// An index that is not below the size, or the database's.
    pub async fn inclusion(&self, index: u64, of: u64) -> Result<Option<Proof>, LedgerError> {
        let mut connection = self.pool.acquire().await?;
        if size(&mut connection).await? < of {
            return Ok(None);
        }
        inclusion(&mut connection, index, of).await.map(Some)
    }

    /// That a tree is the beginning of another; `None` if the ledger has fewer entries.
    ///
    /// # Errors
    /// An empty tree, one that is larger than the other, or the database's.
    pub async fn consistency(&self, from: u64, to: u64) -> Result<Option<Proof>, LedgerError> {
        let mut connection = self.pool.acquire().await?;
        if size(&mut connection).await? < to {
            return Ok(None);
        }
        consistency(&mut connection, from, to).await.map(Some)
    }
}

/// A proof with the roots that it leads to.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Proof {
    pub root: Hash,
    pub hashes: Vec<Hash>,
}

/// Number of leaves.
pub(super) async fn size(connection: &mut SqliteConnection) -> Result<u64, LedgerError> {
    let size: i64 = sqlx::query_scalar("SELECT COALESCE(MAX(leaf), -1) + 1 FROM tree_leaves").fetch_one(connection).await?;
    u64::try_from(size).map_err(|_| LedgerError::OutOfRange { what: "index" })
}

/// Root of the leaves from `first` up to `end`, where `first` is a multiple of a power of two that is not below their number.
pub(super) async fn root_of(connection: &mut SqliteConnection, mut first: u64, end: u64) -> Result<Hash, LedgerError> {
    let mut peaks = Vec::new();
    while first < end {
        let level = (end - first).ilog2();
        let last = first + (1 << level) - 1;
        let sql = "SELECT nodes FROM tree_leaves WHERE leaf = ?";
        let last_leaf = i64::try_from(last).map_err(|_| LedgerError::OutOfRange { what: "index" })?;
        let nodes: Vec<u8> = sqlx::query_scalar(sql).bind(last_leaf).fetch_one(&mut *connection).await?;
        peaks.push(node(&nodes, level)?);
        first = last + 1;
    }
    let mut peaks = peaks.into_iter().rev();
    let last = peaks.next().ok_or(LedgerError::OutOfRange { what: "subtree" })?;
    Ok(peaks.fold(last, |right, left| parent_hash(&left, &right)))
}

/// The nodes with these numbers in the tree of `size` leaves, numbered from left to right as they stand above the leaves.
async fn nodes_of(connection: &mut SqliteConnection, numbers: &[u64], size: u64) -> Result<Vec<Hash>, LedgerError> {
    let mut hashes = Vec::with_capacity(numbers.len());
    for number in numbers {
        let leaves = 1 << number.trailing_ones();
        let first = (number + 1 - leaves) / 2;
        hashes.push(root_of(connection, first, size.min(first + leaves)).await?);
    }
    Ok(hashes)
}

/// That leaf `index` is in the tree of `size` leaves; needs `index < size`, and a stored tree that is as large.
pub(super) async fn inclusion(connection: &mut SqliteConnection, index: u64, size: u64) -> Result<Proof, LedgerError> {
    if index >= size {
        return Err(LedgerError::OutOfRange { what: "index" });
    }
    let hashes = nodes_of(connection, &indices_for_inclusion_proof(size, index), size).await?;
    Ok(Proof { root: root_of(connection, 0, size).await?, hashes })
}

/// That the tree of `from` leaves is the beginning of that of `to`; needs `1 <= from <= to`, and a stored tree that is as large.
pub(super) async fn consistency(connection: &mut SqliteConnection, from: u64, to: u64) -> Result<Proof, LedgerError> {
    if from == 0 || from > to {
        return Err(LedgerError::OutOfRange { what: "size" });
    }
    let hashes = nodes_of(connection, &indices_for_consistency_proof(from, to - from), to).await?;
    Ok(Proof { root: root_of(connection, 0, to).await?, hashes })
}

/// Whether a line is leaf `index` of the tree of this size and root.
pub fn includes(size: u64, root: &Hash, index: u64, line: &str, hashes: &[Hash]) -> bool {
    let proof = InclusionProof::<Sha256>::try_from_bytes(hashes.concat());
    size <= u64::MAX / 2
        && proof.is_ok_and(|proof| RootHash::new((*root).into(), size).verify_inclusion(&line.as_bytes(), index, &proof).is_ok())
}

/// Whether one tree is the beginning of the other; sizes and roots.
pub fn extends((from, old): (u64, &Hash), (to, new): (u64, &Hash), hashes: &[Hash]) -> bool {
    let proof = ConsistencyProof::<Sha256>::try_from_bytes(hashes.concat());
    let (old, new) = (RootHash::<Sha256>::new((*old).into(), from), RootHash::new((*new).into(), to));
    proof.is_ok_and(|proof| new.verify_consistency(&old, &proof).is_ok())
}

/// Hashes as documents have them.
pub fn hexadecimal(hashes: &[Hash]) -> Vec<String> {
    hashes.iter().map(hex::encode).collect()
}

#[cfg(test)]
mod tests {
    use ct_merkle::mem_backed_tree::MemoryBackedTree;
    use sqlx::Connection;

    use super::{
        super::{
            MIGRATIONS,
            source::Draft,
            tree::{Frontier, INSERT, append, leaf_hash},
        },
        *,
    };
    use crate::clock::Stamp;

    // Source: the tree in memory of `ct-merkle`, which compares itself with the standard's known answers.
    #[tokio::test]
    async fn stored_proofs_are_those_of_the_tree_in_memory() {
        let mut connection = SqliteConnection::connect("sqlite::memory:").await.unwrap();
        MIGRATIONS.run(&mut connection).await.unwrap();
        let mut frontier = Frontier::default();
        let mut tree = MemoryBackedTree::<Sha256, String>::new();
        for size in 1..=33 {
            let recorded_at = Stamp::from_microseconds(size as i64).unwrap();
            let draft = Draft { kind: "key", subject: size.to_string(), recorded_at, body: serde_json::Map::new(), texts: vec![] };
            append(&mut connection, &mut frontier, &draft, INSERT).await.unwrap();
            assert_eq!(Frontier::read(&mut connection).await.unwrap(), frontier);
            let line: String =
                sqlx::query_scalar("SELECT entry FROM tree_leaves ORDER BY leaf DESC").fetch_one(&mut connection).await.unwrap();
            tree.push(line);
            let root: Hash = (*tree.root().as_bytes()).into();
            for index in 0..size {
                let proof = inclusion(&mut connection, index, size).await.unwrap();
                assert_eq!((proof.root, proof.hashes.concat()), (root, tree.prove_inclusion(index as usize).as_bytes().to_vec()));
                let line = tree.get(index as usize).unwrap();
                assert!(includes(size, &root, index, line, &proof.hashes));
                assert!(!includes(size, &root, index, &format!("{line} "), &proof.hashes));
            }
            for from in 1..=size {
                let proof = consistency(&mut connection, from, size).await.unwrap();
                if from < size {
                    let expected = tree.prove_consistency((size - from) as usize);
                    assert_eq!(proof.hashes.concat(), expected.as_bytes(), "{from} to {size}");
                }
                let old = root_of(&mut connection, 0, from).await.unwrap();
                assert!(extends((from, &old), (size, &root), &proof.hashes), "{from} to {size}");
                assert!(!extends((from, &leaf_hash(b"")), (size, &root), &proof.hashes));
            }
        }
        assert!(inclusion(&mut connection, 33, 33).await.is_err() && consistency(&mut connection, 0, 33).await.is_err());
    }
}
