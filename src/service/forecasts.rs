//! Forecasts: computed on a solver thread, and not kept.

use super::{Service, SolveError};
use crate::{
    fault::Fault,
    forecast::{Forecast, ForecastRequest, forecast},
};

/// Nothing above this is computed: some minutes of one solver thread, in the unit of [`crate::relaxation::cost`].
const LIMIT: f64 = 4e11;

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
                "the forecast is estimated at {cost:.1e} steps if no point shared a witness, the limit is {LIMIT:.0e}: ask for fewer points or \
                 curves, or a coarser level"
            );
            return Err(Fault::new("/sweep", detail).into());
        }
        Ok(self.solvers.run(move || forecast(&request, |_| {})).await?.outcome)
    }
}
