//! What every batch of a rig is held against, in memory: its newest profile, and the counts of its newest certified batch. The ledger has
//! both; this service is the only one that adds to it.

use std::{
    collections::HashMap,
    sync::{Arc, PoisonError, RwLock},
};

use uuid::Uuid;

use crate::{counts::Table, ledger::rows::ProfileVersion, profile::RigName};

/// Counts, or that there are none, and the certification they are of. Identifiers sort by time.
type Certified = (Option<Uuid>, Option<Arc<Table<u64>>>);

/// Newest things of each rig.
#[derive(Debug, Default)]
pub(super) struct Newest {
    profiles: RwLock<HashMap<RigName, Arc<ProfileVersion>>>,
    certified: RwLock<HashMap<RigName, Certified>>,
}

impl Newest {
    pub fn profile(&self, rig: &RigName) -> Option<Arc<ProfileVersion>> {
        self.profiles.read().unwrap_or_else(PoisonError::into_inner).get(rig).cloned()
    }

    /// Takes note of a profile, unless a newer one is known.
    pub fn note_profile(&self, profile: Arc<ProfileVersion>) {
        let mut profiles = self.profiles.write().unwrap_or_else(PoisonError::into_inner);
        if profiles.get(&profile.rig).is_none_or(|known| known.version < profile.version) {
            profiles.insert(profile.rig.clone(), profile);
        }
    }

    /// Counts of the newest certified batch, `Some(None)` if there is none; `None` if that is not known.
    pub fn certified(&self, rig: &RigName) -> Option<Option<Arc<Table<u64>>>> {
        self.certified.read().unwrap_or_else(PoisonError::into_inner).get(rig).map(|(_, counts)| counts.clone())
    }

    /// Takes note of a certified batch, or that there is none, unless a newer one is known.
    pub fn note_certified(&self, rig: &RigName, id: Option<Uuid>, counts: Option<Arc<Table<u64>>>) {
        let mut certified = self.certified.write().unwrap_or_else(PoisonError::into_inner);
        if certified.get(rig).is_none_or(|(known, _)| *known < id) {
            certified.insert(rig.clone(), (id, counts));
        }
    }
}
