//! Connections: taken up to a number, given only so long to say what they want, and finished before the service ends.

use std::{convert::Infallible, future::Future, io, net::IpAddr, pin::Pin, sync::Arc, time::Duration};

use axum::{Router, body::Body, extract::Request, response::Response};
use hyper::{body::Incoming, server::conn::http1, service::service_fn};
use hyper_util::rt::{TokioIo, TokioTimer};
use tokio::{
    net::{TcpListener, TcpStream},
    sync::{Semaphore, watch},
};
use tokio_io_timeout::TimeoutStream;
use tower_service::Service as _;

use super::{
    access::Peer,
    limits::Limits,
    router::{crowded, router},
};
use crate::service::Service;

/// Connections above the number that is served, so that whoever watches over the process still gets an answer. Each is closed after one
/// request, and given little time.
const RESERVE: usize = 64;
const RESERVE_HEAD: Duration = Duration::from_secs(1);
const MAX_HEADERS: usize = 64;
/// How long to wait after the operating system refused a connection, for want of file descriptors perhaps.
const ACCEPT_PAUSE: Duration = Duration::from_millis(100);

/// What connections are served with.
struct House {
    service: Arc<Service>,
    app: Router,
    crowded: Router,
    limits: Limits,
    places: Arc<Semaphore>,
    reserve: Arc<Semaphore>,
}

/// Serves until `shutdown` completes; then finishes what was accepted and closes the service.
///
/// # Errors
/// None at present: connections that fail are their clients' loss.
pub async fn run(listener: TcpListener, service: Arc<Service>, limits: Limits, shutdown: impl Future<Output = ()>) -> io::Result<()> {
    run_beside(listener, service, limits, Router::new(), shutdown).await
}

/// The same with further routes beside the interface, in the same layers: the bench compares with those.
///
/// # Errors
/// As [`run`].
pub async fn run_beside(
    listener: TcpListener,
    service: Arc<Service>,
    limits: Limits,
    beside: Router,
    shutdown: impl Future<Output = ()>,
) -> io::Result<()> {
    let house = House {
        app: router(Arc::clone(&service), &limits, beside),
        crowded: crowded(Arc::clone(&service), &limits),
        places: Arc::new(Semaphore::new(limits.connections)),
        reserve: Arc::new(Semaphore::new(RESERVE)),
        limits,
        service,
    };
    let stop = watch::Sender::new(false);
    tokio::select! {
        () = shutdown => {}
        () = house.accept(&listener, &stop) => {}
    }
    house.service.announce_shutdown();
    drop(listener);
    stop.send_replace(true);
    // A connection gives its place back when it is through. Places are never closed: waiting cannot fail.
    let all = u32::try_from(house.limits.connections).unwrap_or(u32::MAX);
    let _ = house.places.acquire_many(all).await;
    let _ = house.reserve.acquire_many(RESERVE as u32).await;
    house.service.close().await;
    Ok(())
}

impl House {
    async fn accept(&self, listener: &TcpListener, stop: &watch::Sender<bool>) {
        loop {
            let (stream, peer) = match listener.accept().await {
                Ok((stream, peer)) => (stream, peer.ip().to_canonical()),
                Err(error) => {
                    tracing::warn!(%error, "a connection was not accepted");
                    tokio::time::sleep(ACCEPT_PAUSE).await;
                    continue;
                }
            };
            let (place, served) = match Arc::clone(&self.places).try_acquire_owned() {
                Ok(place) => (place, true),
                Err(_) => match Arc::clone(&self.reserve).acquire_owned().await {
                    Ok(place) => (place, false),
                    // Places are never closed.
                    Err(_) => return,
                },
            };
            let connection = self.serve(stream, peer, served, stop.subscribe());
            let connected = self.service.metrics().connected();
            tokio::spawn(async move {
                connection.await;
                drop((place, connected));
            });
        }
    }

    /// Serves one connection: with the whole interface, or, in the reserve, one request of whoever watches over the process.
    fn serve(&self, stream: TcpStream, peer: IpAddr, served: bool, mut stop: watch::Receiver<bool>) -> impl Future<Output = ()> + use<> {
        let (app, head) = if served { (&self.app, self.limits.head) } else { (&self.crowded, RESERVE_HEAD) };
        let app = app.clone();
        let answer = self.limits.answer;
        async move {
            // Answers are written whole: waiting to fill a packet would only delay them.
            let _ = stream.set_nodelay(true);
            let mut stream = TimeoutStream::new(stream);
            stream.set_write_timeout(Some(answer));
            let mut builder = http1::Builder::new();
            builder.timer(TokioTimer::new()).header_read_timeout(head).max_headers(MAX_HEADERS).keep_alive(served);
            let connection = builder.serve_connection(TokioIo::new(Box::pin(stream)), service_fn(|request| answered(&app, peer, request)));
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
    }
}

fn answered(app: &Router, peer: IpAddr, request: hyper::Request<Incoming>) -> Answering {
    let mut request: Request = request.map(Body::new);
    request.extensions_mut().insert(Peer(peer));
    // A router is always ready.
    Box::pin(app.clone().call(request))
}

type Answering = Pin<Box<dyn Future<Output = Result<Response, Infallible>> + Send>>;

async fn stopped(stop: &mut watch::Receiver<bool>) {
    // An error means that the server itself has gone, which is a stop as well.
    drop(stop.wait_for(|stopped| *stopped).await);
}
