//! Leakage budgets that are kept, and put in the place of their digests.

use super::Service;
use crate::{
    clock::Stamp,
    fault::Fault,
    forecast::{ForecastDocument, ForecastRequest},
    leakage::budget::Budget,
    ledger::{LedgerError, history::Page, rows::KeptBudget},
    profile::{Profile, ProfileDocument},
    scenario::LeakageDocument,
};

/// Why a document was not taken. Nothing was recorded.
#[derive(Debug, thiserror::Error)]
pub enum DocumentError {
    #[error(transparent)]
    Document(#[from] Fault),
    #[error(transparent)]
    Ledger(#[from] LedgerError),
}

impl Service {
    /// Keeps a budget under its digest; answers whether it was not kept before.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn keep_budget(&self, budget: &Budget) -> Result<bool, LedgerError> {
        let recorded_at: Stamp = self.clock.now();
        self.ledger.writer.keep_budget(budget.digest(), budget.document().canonical_json(), recorded_at).await
    }

    /// The canonical text of a budget that is kept.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn budget(&self, digest: &str) -> Result<Option<String>, LedgerError> {
        Ok(self.ledger.history.budget(digest).await?.map(|kept| kept.document))
    }

    /// Budgets that are kept, newest first, beginning before a number.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn budgets(&self, before: Option<u64>, limit: u32) -> Result<Page<KeptBudget>, LedgerError> {
        self.ledger.history.budgets(before, limit).await
    }

    /// A profile from its document, in which a stored budget may be named by its digest.
    ///
    /// # Errors
    /// What is wrong with the document, or the ledger's.
    pub async fn read_profile(&self, mut document: ProfileDocument) -> Result<Profile, DocumentError> {
        self.fetch_budget(&mut document.scenario.leakage).await?.map_err(|fault| fault.under("/scenario"))?;
        Ok(Profile::try_from(document)?)
    }

    /// A forecast's request from its document, in which a stored budget may be named likewise.
    ///
    /// # Errors
    /// What is wrong with the document, or the ledger's.
    pub async fn read_forecast(&self, mut document: ForecastDocument) -> Result<ForecastRequest, DocumentError> {
        self.fetch_budget(&mut document.scenario.leakage).await?.map_err(|fault| fault.under("/scenario"))?;
        Ok(ForecastRequest::try_from(document)?)
    }

    /// Puts a stored budget in the place of its digest. What is left then needs no ledger to be understood. The fault, if the digest is
    /// unknown, points at the member `leakage`.
    pub(super) async fn fetch_budget(&self, leakage: &mut LeakageDocument) -> Result<Result<(), Fault>, LedgerError> {
        let LeakageDocument::Stored(digest) = leakage else { return Ok(Ok(())) };
        let Some(kept) = self.ledger.history.budget(digest).await? else {
            let detail = format!("no budget is kept under {digest}; POST /v1/leakage keeps one and answers with its digest");
            return Ok(Err(Fault::new("/leakage", detail)));
        };
        *leakage = LeakageDocument::Budget(Box::new(kept.budget()?));
        Ok(Ok(()))
    }
}
