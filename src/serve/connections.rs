//! Connections: how many, how slow they may be, and how they end.

use std::convert::Infallible;
use std::future::Future;
use std::io;
use std::pin::pin;
use std::sync::Arc;
use std::time::Duration;

use axum::Router;
use axum::body::Body;
use hyper::Request;
use hyper::body::Incoming;
use hyper::server::conn::http1;
use hyper_util::rt::{TokioIo, TokioTimer};
use hyper_util::server::graceful::GracefulShutdown;
use tokio::io::{AsyncRead, AsyncWrite};
use tokio::net::{TcpListener, TcpStream};
use tokio::sync::Semaphore;
use tokio::time::timeout;
use tokio_rustls::TlsAcceptor;
use tower_service::Service;

use super::shared::Shared;

/// How long requests that were begun may take to end once the daemon stops.
const LAST: Duration = Duration::from_secs(20);
/// Rest after the system has refused a connection, most often for want of file descriptors.
const BREATH: Duration = Duration::from_millis(100);

/// Accepts connections until `shutdown` is over, then lets those that are at work end.
pub(super) async fn accept(
    listener: TcpListener,
    router: Router,
    shared: &Arc<Shared>,
    shutdown: impl Future<Output = ()>,
) -> io::Result<()> {
    let room = Arc::new(Semaphore::new(shared.config.limits.connections));
    let tls = shared.config.tls.clone().map(TlsAcceptor::from);
    let graceful = GracefulShutdown::new();
    let mut shutdown = pin!(shutdown);
    loop {
        let stream = tokio::select! {
            accepted = listener.accept() => match accepted {
                Ok((stream, _)) => stream,
                Err(error) => {
                    tracing::warn!(%error, "a connection could not be accepted");
                    tokio::time::sleep(BREATH).await;
                    continue;
                }
            },
            () = &mut shutdown => break,
        };
        let Ok(permit) = Arc::clone(&room).try_acquire_owned() else {
            shared.metrics.refused_connections.inc();
            tokio::spawn(turn_away(stream, shared.config.limits.head));
            continue;
        };
        let (router, shared, tls) = (router.clone(), Arc::clone(shared), tls.clone());
        let watcher = graceful.watcher();
        tokio::spawn(async move {
            let _permit = permit;
            let _ = stream.set_nodelay(true);
            shared.metrics.connections.inc();
            match tls {
                None => serve(stream, router, &shared, watcher).await,
                // A client that never finishes its handshake is a slow one too.
                Some(tls) => match timeout(shared.config.limits.head, tls.accept(stream)).await {
                    Ok(Ok(stream)) => serve(stream, router, &shared, watcher).await,
                    Ok(Err(error)) => tracing::debug!(%error, "no TLS handshake"),
                    Err(_) => tracing::debug!("the TLS handshake took too long"),
                },
            }
            shared.metrics.connections.dec();
        });
    }
    drop(listener);
    shared.close();
    tracing::info!("stopping: no more connections are accepted");
    if timeout(LAST, graceful.shutdown()).await.is_err() {
        tracing::warn!("some requests did not end in time");
    }
    Ok(())
}

async fn serve(
    stream: impl AsyncRead + AsyncWrite + Unpin + Send + 'static,
    router: Router,
    shared: &Shared,
    watcher: hyper_util::server::graceful::Watcher,
) {
    let service = hyper::service::service_fn(move |request: Request<Incoming>| {
        let mut router = router.clone();
        async move {
            Ok::<_, Infallible>(router.call(request.map(Body::new)).await.unwrap_or_else(|e| match e {}))
        }
    });
    let connection = http1::Builder::new()
        .timer(TokioTimer::new())
        // Also closes a connection that stays idle.
        .header_read_timeout(shared.config.limits.head)
        .max_buf_size(64 << 10)
        .serve_connection(TokioIo::new(stream), service);
    if let Err(error) = watcher.watch(connection).await {
        tracing::debug!(%error, "a connection ended early");
    }
}

/// Says that there is no room, whatever was asked.
async fn turn_away(stream: TcpStream, time: Duration) {
    const ANSWER: &[u8] = b"HTTP/1.1 503 Service Unavailable\r\nConnection: close\r\nRetry-After: 1\r\n\
        Content-Type: application/problem+json\r\nContent-Length: 172\r\n\r\n";
    const PROBLEM: &str = "{\"type\":\"urn:outwait:problem:connections\",\"title\":\"Too many connections\",\
        \"status\":503,\"detail\":\"all connections are taken\",\"remedy\":\"use one connection for many requests\"}\n";
    use tokio::io::AsyncWriteExt;
    let mut stream = stream;
    let answer = [ANSWER, PROBLEM.as_bytes()].concat();
    let _ = timeout(time, async {
        stream.write_all(&answer).await?;
        stream.shutdown().await
    })
    .await;
}
