//! The signing key, and beside it the last checkpoint that was signed with it.
//!
//! Both are files of their own and not part of the database, so that a database that is restored from a backup does not take them back in
//! time: what was signed stays signed. Under one key the tree only grows. A tree that is not an extension of the last signed one is
//! signed under a new key, with a name of its own, or not at all.

use std::{
    fs::{self, File, OpenOptions},
    io::{self, Write},
    path::{Path, PathBuf},
    sync::Arc,
};

use rand::TryRng;

use super::{
    checkpoint::{Checkpoint, NoteError, Signer, Verifier},
    tree::{Frontier, Hash},
};

/// Why the key cannot be used.
#[derive(Debug, Clone, thiserror::Error)]
pub enum KeyError {
    #[error("the ledger's key {} cannot be read or written", path.display())]
    File { path: PathBuf, source: Arc<io::Error> },
    #[error("{} does not hold what it should", path.display())]
    Content { path: PathBuf, source: NoteError },
    #[error("the ledger's key {} is used by another process", path.display())]
    Taken { path: PathBuf },
    #[error("{} is missing: it says what was signed last with the key beside it, and without it that key signs no more; bring the file back, or \
             move the key away, and the ledger continues under a new one", path.display())]
    Forgotten { path: PathBuf },
    #[error("the system gives no random bytes")]
    Random,
}

/// A key that this process alone signs with.
#[derive(Debug)]
pub struct Key {
    signer: Signer,
    /// File of the last signed checkpoint.
    signed: PathBuf,
    last: Checkpoint,
    note: String,
    /// Held locked for as long as the key is.
    _lock: File,
}

impl Key {
    /// The files of a database's key, unless others are named.
    pub fn beside(database: &Path) -> PathBuf {
        with_suffix(database, ".key")
    }

    /// The file of the last checkpoint that was signed with a key.
    pub fn signed(key: &Path) -> PathBuf {
        with_suffix(key, ".checkpoint")
    }

    /// The note of the last checkpoint, without the key; `None` if there is none.
    ///
    /// # Errors
    /// A file that cannot be read, or is no checkpoint.
    pub fn signed_note(key: &Path) -> Result<Option<(String, Checkpoint)>, KeyError> {
        let path = Self::signed(key);
        let note = match fs::read_to_string(&path) {
            Ok(note) => note,
            Err(error) if error.kind() == io::ErrorKind::NotFound => return Ok(None),
            Err(source) => return Err(KeyError::File { path, source: Arc::new(source) }),
        };
        let checkpoint = Checkpoint::read(&note).map_err(|source| KeyError::Content { path, source })?;
        Ok(Some((note, checkpoint)))
    }

    /// Reads the key, or makes one if there is none.
    ///
    /// # Errors
    /// Files that cannot be read or written, a key that another process holds, or one whose last checkpoint is missing.
    pub fn open(path: &Path) -> Result<Self, KeyError> {
        let failed = |source: io::Error| KeyError::File { path: path.to_owned(), source: Arc::new(source) };
        let signed = Self::signed(path);
        if !path.try_exists().map_err(failed)? {
            let mut seed = [0; 32];
            rand::rngs::SysRng.try_fill_bytes(&mut seed).map_err(|_| KeyError::Random)?;
            let signer = Signer::new(&seed);
            // The key last: one without its checkpoint is not believed.
            let note = signer.sign(0, Frontier::default().root());
            replace(&signed, &note, 0o644).and_then(|()| replace(path, &signer.secret(), 0o600)).map_err(failed)?;
        }
        let lock = File::open(path).map_err(failed)?;
        lock.try_lock().map_err(|error| match error {
            fs::TryLockError::WouldBlock => KeyError::Taken { path: path.to_owned() },
            fs::TryLockError::Error(source) => failed(source),
        })?;
        let secret = fs::read_to_string(path).map_err(failed)?;
        let signer = Signer::read(&secret).map_err(|source| KeyError::Content { path: path.to_owned(), source })?;
        let note = fs::read_to_string(&signed).map_err(|source| match source.kind() {
            io::ErrorKind::NotFound => KeyError::Forgotten { path: signed.clone() },
            _ => KeyError::File { path: signed.clone(), source: Arc::new(source) },
        })?;
        let last = signer.verifier().confirm(&note).map_err(|source| KeyError::Content { path: signed.clone(), source })?;
        Ok(Self { signer, signed, last, note, _lock: lock })
    }

    pub fn verifier(&self) -> Verifier {
        self.signer.verifier()
    }

    /// What was signed last.
    pub fn last(&self) -> &Checkpoint {
        &self.last
    }

    /// Signs a tree that extends the last signed one; the caller has made sure that it does. The note is on disk before anyone sees it.
    ///
    /// # Errors
    /// A file that cannot be written: nothing was signed then, as far as anyone knows.
    pub(super) fn sign(&mut self, size: u64, root: Hash) -> Result<&str, KeyError> {
        if (size, root) != (self.last.size, self.last.root) {
            let note = self.signer.sign(size, root);
            replace(&self.signed, &note, 0o644).map_err(|source| KeyError::File { path: self.signed.clone(), source: Arc::new(source) })?;
            self.last = Checkpoint { origin: self.last.origin.clone(), size, root };
            self.note = note;
        }
        Ok(&self.note)
    }
}

fn with_suffix(path: &Path, suffix: &str) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(suffix);
    name.into()
}

/// Puts a text in a file's place such that, whenever the power fails, the file holds the old text or the new one.
fn replace(path: &Path, text: &str, mode: u32) -> io::Result<()> {
    let beside = with_suffix(path, ".new");
    let mut options = OpenOptions::new();
    options.write(true).create(true).truncate(true);
    #[cfg(unix)]
    std::os::unix::fs::OpenOptionsExt::mode(&mut options, mode);
    // One that was left behind may have other rights.
    match fs::remove_file(&beside) {
        Err(error) if error.kind() != io::ErrorKind::NotFound => return Err(error),
        _ => {}
    }
    let mut file = options.open(&beside)?;
    file.write_all(text.as_bytes())?;
    file.sync_all()?;
    fs::rename(&beside, path)?;
    let folder = path.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new("."));
    File::open(folder)?.sync_all()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_key_remembers_what_it_signed_and_has_one_holder() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("ledger.key");
        let mut key = Key::open(&path).unwrap();
        assert!(matches!(Key::open(&path), Err(KeyError::Taken { .. })));
        let note = key.sign(3, [1; 32]).unwrap().to_owned();
        let name = key.verifier();
        drop(key);

        let key = Key::open(&path).unwrap();
        assert_eq!((key.verifier(), key.last().size, key.note.as_str()), (name, 3, note.as_str()));
        #[cfg(unix)]
        {
            use std::os::unix::fs::PermissionsExt;
            assert_eq!(fs::metadata(&path).unwrap().permissions().mode() & 0o777, 0o600);
        }
        drop(key);
        fs::remove_file(Key::signed(&path)).unwrap();
        assert!(matches!(Key::open(&path), Err(KeyError::Forgotten { .. })));
    }
}
