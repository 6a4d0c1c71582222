//! Connections: taken up to a number, given only so long to say what they want, and finished before the service ends.

use std::{io, sync::Arc, time::Duration};

use axum::Router;
use hyper::server::conn::http1;
use hyper_util::{
    rt::{TokioIo, TokioTimer},
    service::TowerToHyperService,
};
use tokio::{
    net::{TcpListener, TcpStream},
    sync::{Semaphore, watch},
};

use super::router::router;
use crate::service::Service;

/// Connections at a time; more wait unaccepted.
const MAX_CONNECTIONS: usize = 256;
/// How long a client may take over the head of a request, and how long a kept connection may lie idle.
const HEAD_TIMEOUT: Duration = Duration::from_secs(10);
const MAX_HEADERS: usize = 64;
/// How long to wait after the operating system refused a connection, for want of file descriptors perhaps.
const ACCEPT_PAUSE: Duration = Duration::from_millis(100);

/// Serves until `shutdown` completes; then finishes what was accepted and closes the service.
///
/// # Errors
/// None at present: connections that fail are their clients' loss.
pub async fn run(listener: TcpListener, service: Arc<Service>, shutdown: impl Future<Output = ()>) -> io::Result<()> {
    serve(listener, router(Arc::clone(&service)), service, shutdown).await
}

/// As [`run`], with a router that was made already.
///
/// # Errors
/// As [`run`].
pub async fn serve(listener: TcpListener, app: Router, service: Arc<Service>, shutdown: impl Future<Output = ()>) -> io::Result<()> {
    let places = Arc::new(Semaphore::new(MAX_CONNECTIONS));
    let stop = watch::Sender::new(false);
    tokio::select! {
        () = shutdown => {}
        () = accept(&listener, &app, &places, &stop) => {}
    }
    service.announce_shutdown();
    drop(listener);
    stop.send_replace(true);
    // A connection gives its place back when it is through. Places are never closed: waiting cannot fail.
    let _ = places.acquire_many(MAX_CONNECTIONS as u32).await;
    service.close().await;
    Ok(())
}

async fn accept(listener: &TcpListener, app: &Router, places: &Arc<Semaphore>, stop: &watch::Sender<bool>) {
    while let Ok(place) = Arc::clone(places).acquire_owned().await {
        match listener.accept().await {
            Ok((stream, _)) => {
                let connection = converse(stream, app.clone(), stop.subscribe());
                tokio::spawn(async move {
                    connection.await;
                    drop(place);
                });
            }
            Err(error) => {
                tracing::warn!(%error, "a connection was not accepted");
                tokio::time::sleep(ACCEPT_PAUSE).await;
            }
        }
    }
}

async fn converse(stream: TcpStream, app: Router, mut stop: watch::Receiver<bool>) {
    // Answers are written whole: waiting to fill a packet would only delay them.
    let _ = stream.set_nodelay(true);
    let mut builder = http1::Builder::new();
    builder.timer(TokioTimer::new()).header_read_timeout(HEAD_TIMEOUT).max_headers(MAX_HEADERS);
    let connection = builder.serve_connection(TokioIo::new(stream), TowerToHyperService::new(app));
    tokio::pin!(connection);
    let ended = tokio::select! {
        ended = connection.as_mut() => ended,
        () = stopped(&mut stop) => {
            connection.as_mut().graceful_shutdown();
            connection.await
        }
    };
    if let Err(error) = ended {
        tracing::debug!(%error, "a connection ended early");
    }
}

async fn stopped(stop: &mut watch::Receiver<bool>) {
    // An error means that the server itself has gone, which is a stop as well.
    drop(stop.wait_for(|stopped| *stopped).await);
}
