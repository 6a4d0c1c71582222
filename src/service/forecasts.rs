//! Forecasts: computed on a solver thread, between whose solves batches have precedence, and not kept.

use super::{Service, SolveError};
use crate::{
    fault::Fault,
    forecast::{Forecast, ForecastRequest, forecast},
};

/// Nothing above this is computed, in seconds of one solver thread if no point shared a witness.
const LIMIT: f64 = 300.0;

/// Why there is no forecast.
#[derive(Debug, thiserror::Error)]
pub enum ForecastError {
    #[error(transparent)]
    TooLarge(#[from] Fault),
    #[error("no solver took the forecast")]
    Solve(#[from] SolveError),
}

impl Service {
    /// Computes a forecast, unless it would take too long.
    ///
    /// # Errors
    /// See [`ForecastError`].
    pub async fn forecast(&self, request: ForecastRequest) -> Result<Forecast, ForecastError> {
        let cost = request.cost();
        if cost > LIMIT {
            let detail = format!(
                "the forecast is estimated to take {cost:.0} s if no point shared a witness, the limit is {LIMIT} s: ask for fewer points or \
                 curves, or a coarser level"
            );
            return Err(Fault::new("/sweep", detail).into());
        }
        Ok(self.solvers.run_long(move |pause| forecast(&request, |_| pause())).await?)
    }
}
