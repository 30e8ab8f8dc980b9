//! An instrument behind a serial device server: a raw TCP connection that
//! carries what the serial line says.
//!
//! Nothing here waits without bound: names are resolved on threads of their
//! own, few at a time; addresses are tried side by side; a peer that vanished
//! is noticed by probes.

use super::open::OpenFault;
use rustix::net::sockopt;
use std::io;
use std::net::{SocketAddr, ToSocketAddrs};
use std::time::Duration;
use tokio::net::TcpStream;
use tokio::sync::Semaphore;
use tokio::task::{JoinSet, spawn_blocking};
use tokio::time::{sleep, timeout};

/// How the path of such a port begins.
pub const SCHEME: &str = "tcp://";
/// A connection that takes longer is tried anew: a peer that comes back is then met within two seconds.
const CONNECT: Duration = Duration::from_millis(1_500);
/// Addresses of one name that are tried.
const ADDRESSES: usize = 4;
/// Head start of each address before the next.
const APART: Duration = Duration::from_millis(200);
/// Names that are resolved at once: one dead name server must not use up the threads that open ports.
static LOOKUPS: Semaphore = Semaphore::const_new(4);

/// A quiet connection is probed after this time, at this interval, …
const PROBE_AFTER: Duration = Duration::from_secs(4);
const PROBE_EVERY: Duration = Duration::from_secs(1);
const PROBES: u32 = 3;
/// … and given up when nothing was acknowledged for so long; a request that was sent counts as well.
pub const GIVE_UP: Duration = Duration::from_secs(7);

/// Where a peer is, and the addresses its name last had.
#[derive(Clone, Debug)]
pub(super) struct Dialer {
    path: String,
    host: String,
    port: u16,
    known: Vec<SocketAddr>,
}

/// Host and port of `tcp://host:port`; an IPv6 address stands in brackets.
pub fn host_port(path: &str) -> Option<(&str, u16)> {
    let (host, port) = path.strip_prefix(SCHEME)?.rsplit_once(':')?;
    let host = match host.strip_prefix('[') {
        Some(rest) => rest.strip_suffix(']').filter(|h| h.parse::<std::net::Ipv6Addr>().is_ok())?,
        None => Some(host).filter(|h| !h.is_empty() && !h.contains([':', '/', '@']))?,
    };
    let digits = port.bytes().all(|b| b.is_ascii_digit());
    port.parse().ok().filter(|p| digits && *p > 0).map(|port| (host, port))
}

impl Dialer {
    /// `None` when the path is not one of the network.
    pub(super) fn of(path: &str) -> Option<Self> {
        let (host, port) = host_port(path)?;
        Some(Self { path: path.into(), host: host.into(), port, known: Vec::new() })
    }

    /// Resolves the name and connects.
    pub(super) async fn dial(&mut self) -> Result<TcpStream, OpenFault> {
        match resolved(self.host.clone(), self.port).await {
            Ok(found) => self.known = found,
            // The name server may be away for a while; the instrument is not for that.
            Err(_) if !self.known.is_empty() => {}
            Err(e) => {
                let (host, tell) = (&self.host, "check the spelling, or write the address in numbers");
                return Err(self.refused(&format!("the name '{host}' cannot be resolved ({e}); {tell}")));
            }
        }
        let stream = first_of(&self.known).await.map_err(|e| self.refused(&self.why(&e)))?;
        watch_over(&stream).map_err(|e| self.refused(&format!("the connection cannot be watched over ({e}); try again")))?;
        Ok(stream)
    }

    fn why(&self, error: &io::Error) -> String {
        let port = self.port;
        match error.kind() {
            io::ErrorKind::ConnectionRefused => format!(
                "the connection is refused; is {port} the data port of that device server, and is no other program connected to it?"
            ),
            io::ErrorKind::TimedOut => {
                format!("nobody answers; check its power, its network cable and its address, for example with ping {}", self.host)
            }
            _ => format!("the network gives no way to it ({error}); check the address and this machine's network"),
        }
    }

    fn refused(&self, why: &str) -> OpenFault {
        OpenFault::Refused(format!("{}: {why}", self.path))
    }
}

/// Addresses of a name. The thread that asks keeps its place until the system has answered it.
async fn resolved(host: String, port: u16) -> io::Result<Vec<SocketAddr>> {
    if let Ok(ip) = host.parse() {
        return Ok(vec![SocketAddr::new(ip, port)]);
    }
    let late = || io::Error::new(io::ErrorKind::TimedOut, "no answer in time");
    let asked = async {
        let place = LOOKUPS.acquire().await.map_err(io::Error::other)?;
        let ask = move || {
            let _place = place;
            (host.as_str(), port).to_socket_addrs().map(|all| all.take(ADDRESSES).collect::<Vec<_>>())
        };
        spawn_blocking(ask).await.map_err(io::Error::other)?
    };
    let found = timeout(CONNECT, asked).await.map_err(|_| late())??;
    if found.is_empty() { Err(io::Error::new(io::ErrorKind::NotFound, "it has no address")) } else { Ok(found) }
}

/// The first address that answers; each has a head start before the next.
async fn first_of(addresses: &[SocketAddr]) -> io::Result<TcpStream> {
    let mut attempts = JoinSet::new();
    for (n, address) in addresses.iter().copied().enumerate() {
        attempts.spawn(async move {
            sleep(APART * n as u32).await;
            let late = io::Error::new(io::ErrorKind::TimedOut, "no answer in time");
            timeout(CONNECT, TcpStream::connect(address)).await.unwrap_or(Err(late))
        });
    }
    let mut fault = io::Error::new(io::ErrorKind::NotFound, "it has no address");
    while let Some(ended) = attempts.join_next().await {
        match ended {
            Ok(Ok(stream)) => return Ok(stream),
            Ok(Err(e)) => fault = e,
            Err(e) => fault = io::Error::other(e),
        }
    }
    Err(fault)
}

/// Has the kernel notice a peer that is gone without a word.
fn watch_over(stream: &TcpStream) -> rustix::io::Result<()> {
    sockopt::set_tcp_nodelay(stream, true)?;
    sockopt::set_socket_keepalive(stream, true)?;
    sockopt::set_tcp_keepidle(stream, PROBE_AFTER)?;
    sockopt::set_tcp_keepintvl(stream, PROBE_EVERY)?;
    sockopt::set_tcp_keepcnt(stream, PROBES)?;
    sockopt::set_tcp_user_timeout(stream, GIVE_UP.as_millis() as u32)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn addresses_are_read_strictly() {
        let good = [
            ("tcp://pan-1.lab:4001", ("pan-1.lab", 4001)),
            ("tcp://[::1]:9", ("::1", 9)),
            ("tcp://10.0.0.7:65535", ("10.0.0.7", 65535)),
        ];
        for (path, wanted) in good {
            assert_eq!(host_port(path), Some(wanted), "{path}");
        }
        for path in [
            "tcp://host",
            "tcp://:1",
            "tcp://h:0",
            "tcp://h:65536",
            "tcp://h:+1",
            "tcp://::1:9",
            "tcp://[x]:9",
            "udp://h:1",
            "tcp://u@h:1",
        ] {
            assert_eq!(host_port(path), None, "{path}");
        }
    }
}
