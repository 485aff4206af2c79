//! Listens, and bounds what clients may cost.

use std::future::Future;
use std::io;
use std::net::SocketAddr;
use std::sync::Arc;
use std::time::Duration;

use axum::Router;
use axum::extract::ConnectInfo;
use hyper::server::conn::http1;
use hyper_util::rt::{TokioIo, TokioTimer};
use hyper_util::service::TowerToHyperService;
use thiserror::Error;
use tokio::net::{TcpListener, TcpStream};
use tokio::sync::Semaphore;
use tokio::task::JoinSet;
use tokio::time::{sleep, timeout};

use super::asking::{Asking, Behind};
use super::guard::Guard;
use super::{history, routes, stream};

/// Connections at a time; more wait.
const CONNECTIONS: usize = 384;
/// How long the head of a request may take to come, also the next one on a connection.
const HEAD: Duration = Duration::from_secs(15);
/// Largest head \[bytes\].
const BUFFER: usize = 16 * 1024;
/// How long a stop waits for connections to end.
const GOODBYE: Duration = Duration::from_millis(500);
/// How long to wait before a port that is taken is tried again.
const AGAIN: Duration = Duration::from_secs(10);

/// Why nothing listens.
#[derive(Debug, Error)]
#[error(
    "{listen} cannot be listened on: {source}; set `listen` under [http] in the site file to another port, or to \"off\""
)]
pub struct HttpError {
    listen: SocketAddr,
    source: io::Error,
}

/// A socket that listens.
#[derive(Debug)]
pub struct Listening {
    listener: TcpListener,
    /// Where.
    pub address: SocketAddr,
}

/// Listens at an address; port 0 takes a free one.
///
/// # Errors
/// The address cannot be listened on.
pub async fn bind(listen: SocketAddr) -> Result<Listening, HttpError> {
    let failed = |source| HttpError { listen, source };
    let listener = TcpListener::bind(listen).await.map_err(failed)?;
    let address = listener.local_addr().map_err(failed)?;
    Ok(Listening { listener, address })
}

/// As [`serve`], at an address that may be taken for now: recording does not wait for a page.
pub async fn serve_when_free(listen: SocketAddr, behind: Behind, stop: impl Future<Output = ()>) {
    let mut stop = std::pin::pin!(stop);
    let mut told = false;
    let listening = loop {
        match bind(listen).await {
            Ok(listening) => break listening,
            Err(why) if !told => {
                tracing::error!(%why, "there is no page for now");
                told = true;
            }
            Err(_) => {}
        }
        tokio::select! {
            () = stop.as_mut() => return,
            () = sleep(AGAIN) => {}
        }
    };
    serve(listening, behind, stop).await;
}

/// Serves the page and its data until `stop` completes.
pub async fn serve(listening: Listening, behind: Behind, stop: impl Future<Output = ()>) {
    let Listening { listener, address } = listening;
    tracing::info!("the page is at http://{address}/");
    if !address.ip().is_loopback() {
        tracing::warn!(%address, "the page is open to other machines, in clear text; a token is needed to look");
    }
    let http = &behind.site.http;
    let guard = Guard::new(http.hosts.clone(), behind.reader.folder().to_owned());
    let asking = Arc::new(Asking::new(behind));
    let router = routes::router(Arc::clone(&asking), Arc::new(guard));
    let mut beside = JoinSet::new();
    beside.spawn(history::follow(Arc::clone(&asking)));
    beside.spawn(stream::follow(asking));
    let room = Arc::new(Semaphore::new(CONNECTIONS));
    let mut talks = JoinSet::new();
    let mut stop = std::pin::pin!(stop);
    loop {
        let accepted = tokio::select! {
            () = stop.as_mut() => break,
            Some(_) = talks.join_next(), if !talks.is_empty() => continue,
            accepted = accept(&listener, &room) => accepted,
        };
        match accepted {
            Some((stream, peer, place)) => {
                let router = router.clone();
                talks.spawn(async move {
                    talk(stream, peer, router).await;
                    drop(place);
                });
            }
            // Out of descriptors, mostly: it passes.
            None => sleep(Duration::from_millis(200)).await,
        }
    }
    beside.abort_all();
    // Answers that are on their way still go out; those that listen for events are cut off.
    let _ = timeout(GOODBYE, async {
        while talks.join_next().await.is_some() {}
    })
    .await;
}

async fn accept(
    listener: &TcpListener,
    room: &Arc<Semaphore>,
) -> Option<(TcpStream, SocketAddr, tokio::sync::OwnedSemaphorePermit)> {
    let place = Arc::clone(room).acquire_owned().await.ok()?;
    match listener.accept().await {
        Ok((stream, peer)) => Some((stream, peer, place)),
        Err(why) => {
            tracing::warn!(%why, "a connection was not accepted");
            None
        }
    }
}

async fn talk(stream: TcpStream, peer: SocketAddr, router: Router) {
    let _ = stream.set_nodelay(true);
    let router = router.layer(axum::Extension(ConnectInfo(peer)));
    let done = http1::Builder::new()
        .timer(TokioTimer::new())
        .header_read_timeout(HEAD)
        .max_buf_size(BUFFER)
        .serve_connection(TokioIo::new(stream), TowerToHyperService::new(router))
        .await;
    if let Err(why) = done {
        tracing::debug!(%peer, %why, "a connection ended");
    }
}
