//! Who may ask for what: Host, Origin, rate and tokens.
//!
//! A page of another host must not reach us through somebody's browser: the Host must be an address, `localhost` or a
//! name of the site file (a name that a stranger points here is refused), and an Origin must be that same Host. Reads
//! from this machine need no token; all else does. A proxy's mark (`Forwarded`, `X-Forwarded-For`) makes a request one
//! from elsewhere.

use std::collections::HashMap;
use std::net::{IpAddr, SocketAddr};
use std::path::PathBuf;
use std::sync::{Mutex, PoisonError};
use std::time::{Instant, SystemTime};

use axum::http::request::Parts;
use axum::http::{HeaderMap, Method, StatusCode, header};

use super::problem::Problem;
use crate::control::tokens::{Bearer, FILE, Scope, Tokens};
use crate::record::Stamp;

/// Requests a second that one address may go on making.
const RATE: f64 = 40.0;
/// Requests that it may make at once.
const BURST: f64 = 240.0;
/// Wrong tokens that one address may show at once, and a second later again.
const GUESSES: f64 = 10.0;
const GUESS_RATE: f64 = 1.0 / 12.0;
/// Addresses remembered; beyond, those longest quiet are forgotten.
const ADDRESSES: usize = 4096;

/// Who asks.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) enum Who {
    /// Somebody on this machine, without a token.
    Local,
    /// Somebody with a token.
    Bearer(Bearer),
    /// Somebody elsewhere, without one.
    Stranger,
}

/// The guard of one server.
pub(super) struct Guard {
    hosts: Vec<String>,
    folder: PathBuf,
    tokens: Mutex<Kept>,
    addresses: Mutex<HashMap<IpAddr, Allowance>>,
}

/// Tokens as last read.
#[derive(Default)]
struct Kept {
    mark: Option<(SystemTime, u64)>,
    tokens: Tokens,
}

/// What an address may still ask.
struct Allowance {
    requests: f64,
    guesses: f64,
    at: Instant,
}

impl Guard {
    pub(super) fn new(hosts: Vec<String>, folder: PathBuf) -> Self {
        Self {
            hosts,
            folder,
            tokens: Mutex::default(),
            addresses: Mutex::default(),
        }
    }

    /// Whether a request may be looked at, and who makes it.
    pub(super) fn admit(&self, request: &Parts, peer: SocketAddr) -> Result<Who, Problem> {
        let ip = peer.ip().to_canonical();
        self.within_rate(ip)?;
        self.right_host(request)?;
        let local = ip.is_loopback() && !forwarded(&request.headers);
        let Some(shown) = request.headers.get(header::AUTHORIZATION) else {
            return Ok(if local { Who::Local } else { Who::Stranger });
        };
        let text = shown.to_str().ok().and_then(bearer_text);
        let known = text.and_then(|text| self.bearer(text));
        match known {
            Some(bearer) => Ok(Who::Bearer(bearer)),
            None => {
                self.guessed(ip)?;
                Err(Problem::new(
                    StatusCode::UNAUTHORIZED,
                    "this token is unknown, revoked or over; make one with `borewake token SITE make NAME`",
                ))
            }
        }
    }

    fn right_host(&self, request: &Parts) -> Result<(), Problem> {
        let host = request
            .headers
            .get(header::HOST)
            .and_then(|h| h.to_str().ok())
            .or_else(|| request.uri.authority().map(|a| a.as_str()));
        let Some(host) = host else {
            return Err(Problem::wrong("a Host header is due"));
        };
        let name = host_name(host);
        let plain = name.parse::<IpAddr>().is_ok() || name.eq_ignore_ascii_case("localhost");
        if !plain && !self.hosts.iter().any(|h| h.eq_ignore_ascii_case(name)) {
            return Err(Problem::new(
                StatusCode::MISDIRECTED_REQUEST,
                "nothing is served under this host name; ask by address, or add the name to `hosts` under [http] in the site file",
            ));
        }
        let cross = request
            .headers
            .get("sec-fetch-site")
            .is_some_and(|v| v == "cross-site");
        let strange = request.headers.get(header::ORIGIN).is_some_and(|origin| {
            let origin = origin.to_str().unwrap_or_default();
            origin.split_once("://").map(|(_, rest)| rest) != Some(host)
        });
        let navigates = request.method == Method::GET && request.uri.path() == "/";
        if (cross && !navigates) || strange {
            return Err(Problem::new(
                StatusCode::FORBIDDEN,
                "pages of other hosts may not ask here",
            ));
        }
        Ok(())
    }

    fn within_rate(&self, ip: IpAddr) -> Result<(), Problem> {
        let spent = self.spend(ip, |a| &mut a.requests);
        if spent {
            return Ok(());
        }
        let detail = "too many requests from this address; ask more slowly";
        Err(Problem::later(StatusCode::TOO_MANY_REQUESTS, detail, 2))
    }

    fn guessed(&self, ip: IpAddr) -> Result<(), Problem> {
        if self.spend(ip, |a| &mut a.guesses) {
            return Ok(());
        }
        let detail = "too many wrong tokens from this address; wait a minute";
        Err(Problem::later(StatusCode::TOO_MANY_REQUESTS, detail, 60))
    }

    /// Takes one from an allowance; whether there was one.
    fn spend(&self, ip: IpAddr, which: impl Fn(&mut Allowance) -> &mut f64) -> bool {
        let now = Instant::now();
        let mut addresses = self
            .addresses
            .lock()
            .unwrap_or_else(PoisonError::into_inner);
        if addresses.len() >= ADDRESSES && !addresses.contains_key(&ip) {
            let quiet = |a: &Allowance| now.duration_since(a.at).as_secs() < 60;
            addresses.retain(|_, a| quiet(a));
            if addresses.len() >= ADDRESSES {
                return false;
            }
        }
        let allowance = addresses.entry(ip).or_insert(Allowance {
            requests: BURST,
            guesses: GUESSES,
            at: now,
        });
        let passed = now.duration_since(allowance.at).as_secs_f64();
        allowance.at = now;
        allowance.requests = (allowance.requests + passed * RATE).min(BURST);
        allowance.guesses = (allowance.guesses + passed * GUESS_RATE).min(GUESSES);
        let left = which(allowance);
        if *left < 1.0 {
            return false;
        }
        *left -= 1.0;
        true
    }

    /// Whose token a text is; the file is read again when it has changed.
    fn bearer(&self, text: &str) -> Option<Bearer> {
        let mut kept = self.tokens.lock().unwrap_or_else(PoisonError::into_inner);
        let mark = std::fs::metadata(self.folder.join(FILE))
            .ok()
            .and_then(|m| Some((m.modified().ok()?, m.len())));
        if kept.mark != mark {
            match Tokens::read(&self.folder) {
                Ok(tokens) => *kept = Kept { mark, tokens },
                Err(why) => {
                    // Closed rather than as it was: the file may have changed to revoke somebody.
                    tracing::error!(%why, "no token is accepted");
                    *kept = Kept::default();
                }
            }
        }
        kept.tokens.bearer(text, Stamp::now())
    }
}

impl Who {
    /// Lets pass who may read.
    pub(super) fn reads(&self) -> Result<(), Problem> {
        match self {
            Self::Local | Self::Bearer(_) => Ok(()),
            Self::Stranger => Err(Problem::new(
                StatusCode::UNAUTHORIZED,
                "from another machine a token is needed to look; make one with `borewake token SITE make NAME`",
            )),
        }
    }

    /// Lets pass who holds a scope, and gives the name.
    pub(super) fn may(&self, scope: Scope) -> Result<&str, Problem> {
        match self {
            Self::Bearer(bearer) if bearer.scope >= scope => Ok(&bearer.name),
            Self::Bearer(bearer) => Err(Problem::new(
                StatusCode::FORBIDDEN,
                format!(
                    "the token {} may {}; this needs the scope {}",
                    bearer.name,
                    bearer.scope.name(),
                    scope.name()
                ),
            )),
            Self::Local | Self::Stranger => Err(Problem::new(
                StatusCode::UNAUTHORIZED,
                format!(
                    "every change needs a token; make one with `borewake token SITE make NAME --scope {}`",
                    scope.name()
                ),
            )),
        }
    }
}

/// Whether somebody else stands behind whoever connected.
fn forwarded(headers: &HeaderMap) -> bool {
    ["forwarded", "x-forwarded-for", "x-real-ip", "via"]
        .iter()
        .any(|name| headers.contains_key(*name))
}

fn bearer_text(value: &str) -> Option<&str> {
    let (scheme, text) = value.split_once(' ')?;
    scheme.eq_ignore_ascii_case("bearer").then(|| text.trim())
}

/// The name of a Host header, without port and brackets.
fn host_name(host: &str) -> &str {
    if let Some(rest) = host.strip_prefix('[') {
        return rest.split(']').next().unwrap_or_default();
    }
    host.rsplit_once(':').map_or(host, |(name, _)| name)
}

#[cfg(test)]
mod tests {
    use axum::http::Request;

    use super::*;

    fn admit(guard: &Guard, peer: &str, headers: &[(&str, &str)]) -> Result<Who, Problem> {
        let mut request = Request::get("/api/v1/site");
        for (name, value) in headers {
            request = request.header(*name, *value);
        }
        let (parts, ()) = request.body(()).unwrap().into_parts();
        guard.admit(&parts, peer.parse().unwrap())
    }

    #[test]
    fn whoever_is_not_of_this_machine_is_a_stranger() {
        let folder = tempfile::tempdir().unwrap();
        let guard = Guard::new(vec!["watch.example".into()], folder.path().to_owned());
        let host = ("host", "watch.example:443");
        assert_eq!(admit(&guard, "127.0.0.1:9", &[host]).unwrap(), Who::Local);
        assert_eq!(admit(&guard, "[::1]:9", &[host]).unwrap(), Who::Local);
        assert_eq!(
            admit(&guard, "[::ffff:127.0.0.1]:9", &[host]).unwrap(),
            Who::Local
        );
        assert_eq!(
            admit(&guard, "192.0.2.7:9", &[host]).unwrap(),
            Who::Stranger
        );
        let proxied = [host, ("forwarded", "for=192.0.2.7")];
        assert_eq!(
            admit(&guard, "127.0.0.1:9", &proxied).unwrap(),
            Who::Stranger
        );
        assert!(Who::Stranger.reads().is_err() && Who::Local.reads().is_ok());
        assert!(
            Who::Local.may(Scope::Operate).is_err(),
            "no change without a token"
        );
    }

    #[test]
    fn hosts_are_names_we_go_by() {
        for (host, name) in [
            ("127.0.0.1:8070", "127.0.0.1"),
            ("[::1]:8070", "::1"),
            ("[::1]", "::1"),
            ("localhost", "localhost"),
            ("a.b:1", "a.b"),
        ] {
            assert_eq!(host_name(host), name);
        }
        let folder = tempfile::tempdir().unwrap();
        let guard = Guard::new(Vec::new(), folder.path().to_owned());
        assert!(admit(&guard, "127.0.0.1:9", &[("host", "evil.example")]).is_err());
        assert!(admit(&guard, "127.0.0.1:9", &[]).is_err());
        let sly = [("host", "localhost"), ("origin", "http://localhost.evil")];
        assert!(admit(&guard, "127.0.0.1:9", &sly).is_err());
    }

    #[test]
    fn one_address_asking_too_much_leaves_room_for_others() {
        let folder = tempfile::tempdir().unwrap();
        let guard = Guard::new(Vec::new(), folder.path().to_owned());
        let host = [("host", "localhost")];
        let refused = (0..2000).any(|_| admit(&guard, "192.0.2.7:9", &host).is_err());
        assert!(refused);
        assert!(admit(&guard, "192.0.2.8:9", &host).is_ok());
    }
}
