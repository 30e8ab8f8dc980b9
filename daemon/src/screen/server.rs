//! The listener: who may connect, for how long, and how much is read.
//!
//! Everything here is bounded: connections in all and from one address, the
//! time for a head, for a handshake and for a write, the size of a head. It
//! runs in threads of its own that yield to the desk.

use super::app::App;
use axum::Router;
use axum::body::Body;
use hyper::body::Incoming;
use hyper_util::rt::{TokioIo, TokioTimer};
use hyper_util::service::TowerToHyperService;
use std::collections::HashMap;
use std::net::{IpAddr, SocketAddr};
use std::pin::Pin;
use std::sync::{Arc, Mutex, PoisonError};
use std::task::{Context, Poll, ready};
use std::time::Duration;
use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};
use tokio::net::{TcpListener, TcpStream};
use tokio::time::Sleep;
use tokio_rustls::TlsAcceptor;

/// Connections at a time.
const CONNECTIONS_MOST: usize = 512;
/// The last so many are for addresses that hold few.
const RESERVE: usize = 32;
/// Connections of one address of the network.
const OF_ONE_PEER: usize = 64;
/// What an address may hold when only the reserve is left.
const FEW: usize = 4;
/// Time for the head of a request, and for a connection that asks nothing.
const HEAD_TIME: Duration = Duration::from_secs(10);
/// Time for a TLS handshake.
const HANDSHAKE_TIME: Duration = Duration::from_secs(10);
/// A browser that takes nothing for so long is let go.
const WRITE_TIME: Duration = Duration::from_secs(20);
/// Largest head of a request, in bytes.
const HEAD_LARGEST: usize = 16 * 1024;
/// Most lines in a head.
const HEAD_LINES: usize = 64;

/// Both ends of a connection.
#[derive(Clone, Copy, Debug)]
pub struct Ends {
    /// Whose.
    pub peer: SocketAddr,
    /// Ours.
    pub local: SocketAddr,
    /// Whether it is encrypted.
    pub tls: bool,
}

/// Who holds how many connections.
#[derive(Default)]
struct Gate {
    held: Mutex<HashMap<IpAddr, usize>>,
}

/// A connection's place; given back when dropped.
struct Place {
    gate: Arc<Gate>,
    peer: IpAddr,
}

impl Gate {
    fn enter(self: &Arc<Self>, peer: IpAddr) -> Option<Place> {
        let mut held = self.held.lock().unwrap_or_else(PoisonError::into_inner);
        let all: usize = held.values().sum();
        let own = held.get(&peer).copied().unwrap_or(0);
        let most = if peer.is_loopback() { CONNECTIONS_MOST } else { OF_ONE_PEER };
        let most = if all + RESERVE >= CONNECTIONS_MOST { most.min(FEW) } else { most };
        if all >= CONNECTIONS_MOST || own >= most {
            return None;
        }
        *held.entry(peer).or_default() += 1;
        Some(Place { gate: Arc::clone(self), peer })
    }
}

impl Drop for Place {
    fn drop(&mut self) {
        let mut held = self.gate.held.lock().unwrap_or_else(PoisonError::into_inner);
        if let Some(own) = held.get_mut(&self.peer) {
            *own -= 1;
            if *own == 0 {
                held.remove(&self.peer);
            }
        }
    }
}

/// Serves until the task is dropped.
pub(super) async fn serve(listener: TcpListener, tls: Option<TlsAcceptor>, app: Arc<App>) {
    let gate = Arc::new(Gate::default());
    let router = super::routes::router(app);
    loop {
        let (stream, peer) = match listener.accept().await {
            Ok(accepted) => accepted,
            Err(e) => {
                tracing::warn!(error = %e, "the screen cannot accept a connection");
                tokio::time::sleep(Duration::from_millis(200)).await;
                continue;
            }
        };
        // Closed at once where there is no place: a browser tries again.
        let Some(place) = gate.enter(peer.ip()) else { continue };
        let (tls, router) = (tls.clone(), router.clone());
        tokio::spawn(async move {
            if let Err(e) = connection(stream, peer, tls, router).await {
                tracing::debug!(%peer, error = %e, "a browser's connection ended");
            }
            drop(place);
        });
    }
}

type Trouble = Box<dyn std::error::Error + Send + Sync>;

async fn connection(stream: TcpStream, peer: SocketAddr, tls: Option<TlsAcceptor>, router: Router) -> Result<(), Trouble> {
    stream.set_nodelay(true)?;
    let ends = Ends { peer, local: stream.local_addr()?, tls: tls.is_some() };
    match tls {
        None => talk(stream, ends, router).await,
        Some(tls) => {
            let stream = tokio::time::timeout(HANDSHAKE_TIME, tls.accept(stream)).await??;
            talk(stream, ends, router).await
        }
    }
}

async fn talk<S>(stream: S, ends: Ends, router: Router) -> Result<(), Trouble>
where
    S: AsyncRead + AsyncWrite + Unpin + Send + 'static,
{
    let service = hyper::service::service_fn(move |mut request: hyper::Request<Incoming>| {
        request.extensions_mut().insert(ends);
        hyper::service::Service::call(&TowerToHyperService::new(router.clone()), request.map(Body::new))
    });
    hyper::server::conn::http1::Builder::new()
        .timer(TokioTimer::new())
        .header_read_timeout(HEAD_TIME)
        .max_headers(HEAD_LINES)
        .max_buf_size(HEAD_LARGEST)
        .serve_connection(TokioIo::new(Patient { stream, waits: None }), service)
        .await?;
    Ok(())
}

/// A stream whose other end must take what is written within a time.
struct Patient<S> {
    stream: S,
    waits: Option<Pin<Box<Sleep>>>,
}

impl<S> Patient<S> {
    fn judge<T>(&mut self, cx: &mut Context<'_>, went: Poll<std::io::Result<T>>) -> Poll<std::io::Result<T>> {
        if went.is_ready() {
            self.waits = None;
            return went;
        }
        let waits = self.waits.get_or_insert_with(|| Box::pin(tokio::time::sleep(WRITE_TIME)));
        ready!(waits.as_mut().poll(cx));
        Poll::Ready(Err(std::io::ErrorKind::TimedOut.into()))
    }
}

impl<S: AsyncRead + Unpin> AsyncRead for Patient<S> {
    fn poll_read(mut self: Pin<&mut Self>, cx: &mut Context<'_>, buf: &mut ReadBuf<'_>) -> Poll<std::io::Result<()>> {
        Pin::new(&mut self.stream).poll_read(cx, buf)
    }
}

impl<S: AsyncWrite + Unpin> AsyncWrite for Patient<S> {
    fn poll_write(mut self: Pin<&mut Self>, cx: &mut Context<'_>, bytes: &[u8]) -> Poll<std::io::Result<usize>> {
        let went = Pin::new(&mut self.stream).poll_write(cx, bytes);
        self.judge(cx, went)
    }
    fn poll_flush(mut self: Pin<&mut Self>, cx: &mut Context<'_>) -> Poll<std::io::Result<()>> {
        let went = Pin::new(&mut self.stream).poll_flush(cx);
        self.judge(cx, went)
    }
    fn poll_shutdown(mut self: Pin<&mut Self>, cx: &mut Context<'_>) -> Poll<std::io::Result<()>> {
        let went = Pin::new(&mut self.stream).poll_shutdown(cx);
        self.judge(cx, went)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn one_address_cannot_hold_every_place() {
        let gate = Arc::new(Gate::default());
        let far: IpAddr = "192.0.2.7".parse().expect("an address");
        let held: Vec<Place> = std::iter::from_fn(|| gate.enter(far)).collect();
        assert_eq!(held.len(), OF_ONE_PEER);
        let near: IpAddr = "127.0.0.1".parse().expect("an address");
        let many: Vec<Place> = std::iter::from_fn(|| gate.enter(near)).collect();
        assert_eq!(many.len() + held.len() + RESERVE, CONNECTIONS_MOST);
        let other: IpAddr = "192.0.2.8".parse().expect("an address");
        let few: Vec<Place> = std::iter::from_fn(|| gate.enter(other)).collect();
        assert_eq!(few.len(), FEW, "the reserve is for whoever holds few");
        drop(many);
        assert!(gate.enter(near).is_some() && gate.enter(far).is_none());
        drop((held, few));
        assert!(gate.held.lock().expect("not poisoned").is_empty());
    }
}
