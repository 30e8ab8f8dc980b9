//! Who sits at a screen, and whether the browser may look at all.
//!
//! *Admission* to a screen on the network is a cookie that the station's secret
//! has signed: it stays good over a restart and proves no person. A *session*
//! is a random cookie known to this start alone; it names a person who gave a
//! PIN, and for a short time it stands for that PIN.

use axum::http::header::{self, HeaderMap, HeaderValue};
use hmac::{Hmac, Mac};
use sha2::{Digest, Sha256};
use std::collections::HashMap;
use std::path::Path;
use std::sync::{Mutex, MutexGuard, PoisonError};
use std::time::{Duration, Instant, SystemTime, UNIX_EPOCH};

/// A PIN stands for so long after it was last used.
pub const PROOF: Duration = Duration::from_secs(5 * 60);
/// A person stays named at a screen that nobody touches for so long.
const NAMED: Duration = Duration::from_secs(12 * 3_600);
/// Sessions kept; the one longest unused goes first.
const SESSIONS_MOST: usize = 500;
/// A browser that presented the secret is admitted for so long, seconds.
const ADMITTED_S: u64 = 90 * 24 * 3_600;
/// Shortest secret.
const SECRET_SHORTEST: usize = 16;

/// Names and manner of the cookies.
#[derive(Clone, Debug)]
pub struct Cookies {
    /// Of a session.
    pub session: String,
    /// Of an admission.
    pub admission: String,
    /// They only go over TLS.
    pub secure: bool,
}

impl Cookies {
    /// Cookies know no ports: the port is in their name, so that two stations of a machine do not mix.
    pub fn new(port: u16, secure: bool) -> Self {
        let host = if secure { "__Host-" } else { "" };
        Self { session: format!("{host}tarecup-{port}"), admission: format!("{host}tarecup-{port}-admitted"), secure }
    }

    /// A `Set-Cookie` value; `None` as age: until the browser is closed.
    pub fn set(&self, name: &str, value: &str, age_s: Option<u64>) -> HeaderValue {
        let age = age_s.map(|s| format!("; Max-Age={s}")).unwrap_or_default();
        let secure = if self.secure { "; Secure" } else { "" };
        let text = format!("{name}={value}; Path=/; HttpOnly; SameSite=Strict{age}{secure}");
        HeaderValue::from_str(&text).unwrap_or(HeaderValue::from_static(""))
    }
}

/// The value of a cookie, when the request has it exactly once.
fn cookie<'h>(headers: &'h HeaderMap, name: &str) -> Option<&'h str> {
    let lines = headers.get_all(header::COOKIE).iter().filter_map(|v| v.to_str().ok());
    let mut found = lines.flat_map(|l| l.split(';')).filter_map(|pair| pair.trim().split_once('=')).filter(|(n, _)| *n == name);
    let first = found.next()?.1;
    found.next().is_none().then_some(first)
}

/// Random text.
pub fn random() -> Result<String, String> {
    let mut bytes = [0u8; 32];
    getrandom::fill(&mut bytes).map_err(|e| format!("the system gives no random numbers: {e}"))?;
    Ok(hex(&bytes))
}

fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|b| format!("{b:02x}")).collect()
}

/// The secret of a screen on the network.
pub struct Secret(Vec<u8>);

impl Secret {
    /// Reads the secret from the first line of its file, which must be its owner's alone.
    pub fn read(path: &Path) -> Result<Self, String> {
        use std::os::unix::fs::PermissionsExt;
        let trouble = |what: String| format!("secret_file {}: {what}", path.display());
        let make = "make one with `tarecup secret new FILE`";
        let meta = std::fs::metadata(path).map_err(|e| trouble(format!("{e}; {make}")))?;
        if meta.permissions().mode() & 0o077 != 0 {
            return Err(trouble(String::from("others may read it; take that right away (chmod 600)")));
        }
        if meta.len() > 4_096 {
            return Err(trouble(format!("it is no secret of this program; {make}")));
        }
        let text = std::fs::read_to_string(path).map_err(|e| trouble(e.to_string()))?;
        let line = text.lines().next().unwrap_or_default().trim();
        if line.len() < SECRET_SHORTEST {
            return Err(trouble(format!("its first line has fewer than {SECRET_SHORTEST} characters; {make}")));
        }
        Ok(Self(line.as_bytes().to_vec()))
    }

    fn mac(&self, text: &str) -> Option<Hmac<Sha256>> {
        let mut mac = <Hmac<Sha256> as Mac>::new_from_slice(&self.0).ok()?;
        mac.update(text.as_bytes());
        Some(mac)
    }

    /// Whether this is the secret, found out in a time that tells nothing of it.
    pub fn is(&self, given: &str) -> bool {
        let given = Secret(given.trim().as_bytes().to_vec());
        let words = "is it the secret?";
        let (Some(own), Some(other)) = (self.mac(words), given.mac(words)) else { return false };
        own.verify_slice(&other.finalize().into_bytes()).is_ok()
    }

    /// The value of an admission cookie.
    pub fn admission(&self) -> Result<String, String> {
        let until = now_s() + ADMITTED_S;
        let said = format!("{until}.{}", random()?);
        let mac = self.mac(&said).ok_or("the secret cannot be used")?;
        Ok(format!("{said}.{}", hex(&mac.finalize().into_bytes())))
    }

    fn admits(&self, value: &str) -> bool {
        let Some((said, mac)) = value.rsplit_once('.') else { return false };
        let until = said.split('.').next().and_then(|u| u.parse::<u64>().ok());
        let bytes: Option<Vec<u8>> = (mac.len() == 64 && mac.is_ascii())
            .then(|| (0..32).map(|i| u8::from_str_radix(&mac[2 * i..2 * i + 2], 16).ok()).collect())
            .flatten();
        let good = bytes.zip(self.mac(said)).is_some_and(|(bytes, own)| own.verify_slice(&bytes).is_ok());
        good && until.is_some_and(|u| u > now_s())
    }

    /// The cookie of an admitted browser.
    pub fn admit(&self, cookies: &Cookies) -> Result<HeaderValue, String> {
        Ok(cookies.set(&cookies.admission, &self.admission()?, Some(ADMITTED_S)))
    }
}

fn now_s() -> u64 {
    SystemTime::now().duration_since(UNIX_EPOCH).map_or(0, |d| d.as_secs())
}

/// Whether a browser has presented the secret.
pub fn admitted(secret: &Secret, headers: &HeaderMap, cookies: &Cookies) -> bool {
    cookie(headers, &cookies.admission).is_some_and(|value| secret.admits(value))
}

/// Who asks.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Who {
    /// Initials of the person signed in at the screen.
    pub operator: Option<String>,
    /// The PIN was given a short time ago.
    pub proven: bool,
    /// Names the session without giving its cookie away; empty without one.
    pub session: String,
}

struct Session {
    operator: String,
    /// When the PIN was given; `None`: the person is named, not proven.
    proven: Option<Instant>,
    used: Instant,
}

/// Every session, by the digest of its cookie.
#[derive(Default)]
pub struct Sessions {
    all: Mutex<HashMap<[u8; 32], Session>>,
}

fn digest(value: &str) -> [u8; 32] {
    Sha256::digest(value.as_bytes()).into()
}

impl Sessions {
    fn lock(&self) -> MutexGuard<'_, HashMap<[u8; 32], Session>> {
        self.all.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// Who asks, by the session's cookie.
    pub fn who(&self, headers: &HeaderMap, cookies: &Cookies) -> Who {
        let Some(value) = cookie(headers, &cookies.session) else { return Who::default() };
        let key = digest(value);
        let mut all = self.lock();
        let Some(session) = all.get_mut(&key) else { return Who::default() };
        let now = Instant::now();
        if now - session.used > NAMED {
            all.remove(&key);
            return Who::default();
        }
        session.used = now;
        let proven = session.proven.is_some_and(|at| now - at <= PROOF);
        Who { operator: Some(session.operator.clone()), proven, session: hex(&key[..8]) }
    }

    /// The PIN of a session was used: it stands for a while longer.
    pub fn used(&self, headers: &HeaderMap, cookies: &Cookies) {
        let Some(key) = cookie(headers, &cookies.session).map(digest) else { return };
        if let Some(session) = self.lock().get_mut(&key).filter(|s| s.proven.is_some_and(|at| at.elapsed() <= PROOF)) {
            session.proven = Some(Instant::now());
        }
    }

    /// Begins a session of a person, proven by a PIN or only named; gives its cookie.
    pub fn begin(&self, operator: &str, proven: bool, cookies: &Cookies) -> Result<HeaderValue, String> {
        let value = random()?;
        let now = Instant::now();
        let mut all = self.lock();
        all.retain(|_, s| now - s.used <= NAMED);
        while all.len() >= SESSIONS_MOST {
            let Some(oldest) = all.iter().min_by_key(|(_, s)| s.used).map(|(k, _)| *k) else { break };
            all.remove(&oldest);
        }
        all.insert(digest(&value), Session { operator: operator.into(), proven: proven.then_some(now), used: now });
        Ok(cookies.set(&cookies.session, &value, None))
    }

    /// Ends a session; gives the cookie that ends it in the browser too.
    pub fn end(&self, headers: &HeaderMap, cookies: &Cookies) -> HeaderValue {
        if let Some(value) = cookie(headers, &cookies.session) {
            self.lock().remove(&digest(value));
        }
        cookies.set(&cookies.session, "", Some(0))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn headers(value: &HeaderValue) -> HeaderMap {
        let pair = value.to_str().expect("text").split(';').next().expect("a pair").to_string();
        let mut headers = HeaderMap::new();
        headers.insert(header::COOKIE, HeaderValue::from_str(&pair).expect("a cookie"));
        headers
    }

    #[test]
    fn a_session_names_a_person_until_it_ends() {
        let (sessions, cookies) = (Sessions::default(), Cookies::new(8470, false));
        let set = sessions.begin("AB", true, &cookies).expect("a session");
        for part in ["HttpOnly", "SameSite=Strict", "Path=/"] {
            assert!(set.to_str().expect("text").contains(part));
        }
        let asked = headers(&set);
        let who = sessions.who(&asked, &cookies);
        assert!(who.operator.as_deref() == Some("AB") && who.proven && who.session.len() == 16);
        assert_eq!(sessions.who(&HeaderMap::new(), &cookies), Who::default());
        let mut twice = asked.clone();
        twice.append(header::COOKIE, HeaderValue::from_str(&format!("{}=x", cookies.session)).expect("a cookie"));
        assert_eq!(sessions.who(&twice, &cookies), Who::default(), "two cookies of one name prove nothing");
        sessions.end(&asked, &cookies);
        assert_eq!(sessions.who(&asked, &cookies), Who::default());
    }

    #[test]
    fn sessions_are_bounded() {
        let (sessions, cookies) = (Sessions::default(), Cookies::new(8470, true));
        let first = sessions.begin("AB", true, &cookies).expect("a session");
        assert!(first.to_str().expect("text").contains("Secure") && first.to_str().expect("text").starts_with("__Host-"));
        for _ in 0..SESSIONS_MOST {
            sessions.begin("KL", true, &cookies).expect("a session");
        }
        assert_eq!(sessions.lock().len(), SESSIONS_MOST);
    }

    #[test]
    fn only_the_secret_admits() {
        let (secret, other) = (Secret(b"a secret of a station".to_vec()), Secret(b"a secret of another".to_vec()));
        let cookies = Cookies::new(8470, false);
        let set = secret.admit(&cookies).expect("a cookie");
        assert!(admitted(&secret, &headers(&set), &cookies));
        assert!(!admitted(&other, &headers(&set), &cookies));
        assert!(!admitted(&secret, &HeaderMap::new(), &cookies));
        assert!(secret.is(" a secret of a station\n") && !secret.is("a secret of a statio") && !secret.is(""));
        let value = secret.admission().expect("a value");
        let later = value.replacen(value.split('.').next().expect("a time"), "99999999999", 1);
        assert!(secret.admits(&value) && !secret.admits(&later) && !secret.admits("1.x.é") && !secret.admits(""));
    }
}
