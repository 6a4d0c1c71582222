//! One at a time under each idempotency key.

use std::{
    collections::HashMap,
    sync::{Arc, Mutex, MutexGuard},
};

use tokio::sync::OwnedMutexGuard;

use crate::{profile::RigName, submission::IdempotencyKey};

type Name = (RigName, IdempotencyKey);
type Places = HashMap<Name, Arc<tokio::sync::Mutex<()>>>;

/// Who is being served under which key.
#[derive(Debug, Default)]
pub(super) struct Turns {
    places: Mutex<Places>,
}

/// The right to work under a key, until dropped.
#[derive(Debug)]
pub(super) struct Turn {
    turns: Arc<Turns>,
    name: Name,
    /// `None` only while dropping.
    guard: Option<OwnedMutexGuard<()>>,
}

impl Turns {
    /// Waits until nobody else works under the key.
    pub(super) async fn take(self: &Arc<Self>, rig: &RigName, key: &IdempotencyKey) -> Turn {
        let name = (rig.clone(), key.clone());
        let place = Arc::clone(self.places().entry(name.clone()).or_default());
        Turn { turns: Arc::clone(self), name, guard: Some(place.lock_owned().await) }
    }

    fn places(&self) -> MutexGuard<'_, Places> {
        // Every change under this lock is one call to the map: a panic cannot leave it half done.
        self.places.lock().unwrap_or_else(|poisoned| poisoned.into_inner())
    }
}

impl Drop for Turn {
    fn drop(&mut self) {
        let mut places = self.turns.places();
        drop(self.guard.take());
        // Whoever waits holds the place too; with nobody left, the map is its only owner.
        if places.get(&self.name).is_some_and(|place| Arc::strong_count(place) == 1) {
            places.remove(&self.name);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn name() -> Name {
        (RigName::try_from("r".to_owned()).unwrap(), IdempotencyKey::try_from("k").unwrap())
    }

    #[tokio::test]
    async fn turns_come_one_after_the_other_and_leave_nothing_behind() {
        let turns = Arc::new(Turns::default());
        let (rig, key) = name();
        let first = turns.take(&rig, &key).await;
        let second = tokio::spawn({
            let (turns, rig, key) = (Arc::clone(&turns), rig.clone(), key.clone());
            async move { drop(turns.take(&rig, &key).await) }
        });
        tokio::task::yield_now().await;
        assert!(!second.is_finished());
        drop(first);
        second.await.unwrap();
        assert!(turns.places().is_empty());
    }

    #[tokio::test]
    async fn who_gives_up_waiting_leaves_nothing_behind() {
        let turns = Arc::new(Turns::default());
        let (rig, key) = name();
        let first = turns.take(&rig, &key).await;
        let gives_up = tokio::time::timeout(std::time::Duration::from_millis(10), turns.take(&rig, &key)).await;
        assert!(gives_up.is_err());
        drop(first);
        assert!(turns.places().is_empty());
    }
}
