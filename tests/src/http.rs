//! A plain HTTP client: one request a connection, so that tests say exactly what goes over the wire.

use std::io::{BufRead as _, BufReader, Read as _, Write as _};
use std::net::TcpStream;
use std::time::Duration;

/// An answer.
#[derive(Debug, Clone)]
pub struct Answer {
    /// Status code.
    pub status: u16,
    /// Header lines, names in small letters.
    pub headers: Vec<(String, String)>,
    /// Body as text.
    pub body: String,
}

impl Answer {
    /// The first header of a name.
    #[must_use]
    pub fn header(&self, name: &str) -> Option<&str> {
        let found = self.headers.iter().find(|(n, _)| n == name);
        found.map(|(_, value)| value.as_str())
    }

    /// The body as JSON.
    ///
    /// # Panics
    /// It is none.
    #[must_use]
    pub fn json(&self) -> serde_json::Value {
        serde_json::from_str(&self.body).unwrap_or_else(|e| panic!("no JSON ({e}): {self:?}"))
    }
}

/// A request to be made to 127.0.0.1.
#[derive(Debug, Clone)]
pub struct Ask<'a> {
    port: u16,
    method: &'a str,
    path: &'a str,
    headers: Vec<(&'a str, String)>,
    body: Vec<u8>,
}

impl<'a> Ask<'a> {
    /// A GET.
    #[must_use]
    pub fn get(port: u16, path: &'a str) -> Self {
        Self {
            port,
            method: "GET",
            path,
            headers: vec![("host", format!("127.0.0.1:{port}"))],
            body: Vec::new(),
        }
    }

    /// A POST of JSON.
    #[must_use]
    pub fn post(port: u16, path: &'a str, body: &str) -> Self {
        let mut ask = Self::get(port, path);
        ask.method = "POST";
        ask.body = body.as_bytes().to_vec();
        ask.headers
            .push(("content-type", "application/json".into()));
        ask
    }

    /// With a header; it takes the place of one of the same name.
    #[must_use]
    pub fn header(mut self, name: &'a str, value: &str) -> Self {
        self.headers.retain(|(n, _)| *n != name);
        self.headers.push((name, value.to_owned()));
        self
    }

    /// With a token.
    #[must_use]
    pub fn token(self, token: &str) -> Self {
        self.header("authorization", &format!("Bearer {token}"))
    }

    /// Sends it and gives the open connection, for what goes on.
    ///
    /// # Panics
    /// Nobody listens.
    #[must_use]
    pub fn open(&self) -> BufReader<TcpStream> {
        let mut stream = TcpStream::connect(("127.0.0.1", self.port)).expect("somebody listens");
        stream
            .set_read_timeout(Some(Duration::from_secs(60)))
            .expect("a time limit");
        let mut head = format!("{} {} HTTP/1.1\r\n", self.method, self.path);
        for (name, value) in &self.headers {
            head += &format!("{name}: {value}\r\n");
        }
        if self.method == "POST" {
            head += &format!("content-length: {}\r\n", self.body.len());
        }
        head += "connection: close\r\n\r\n";
        stream.write_all(head.as_bytes()).expect("a request");
        // A body that is refused may find the way closed.
        let _ = stream.write_all(&self.body);
        BufReader::new(stream)
    }

    /// Sends it and waits for the answer.
    ///
    /// # Panics
    /// There is none.
    #[must_use]
    pub fn send(&self) -> Answer {
        let mut reader = self.open();
        let (status, headers) = head(&mut reader);
        let mut rest = Vec::new();
        let _ = reader.read_to_end(&mut rest);
        let chunked = headers
            .iter()
            .any(|(n, v)| n == "transfer-encoding" && v == "chunked");
        if chunked {
            rest = unchunk(&rest);
        }
        Answer {
            status,
            headers,
            body: String::from_utf8_lossy(&rest).into_owned(),
        }
    }
}

/// Reads status and headers.
///
/// # Panics
/// They are not HTTP.
pub fn head(reader: &mut BufReader<TcpStream>) -> (u16, Vec<(String, String)>) {
    let mut line = String::new();
    reader.read_line(&mut line).expect("a status line");
    let status = line
        .split(' ')
        .nth(1)
        .and_then(|s| s.parse().ok())
        .unwrap_or_else(|| panic!("no status: {line:?}"));
    let mut headers = Vec::new();
    loop {
        line.clear();
        reader.read_line(&mut line).expect("a header");
        let Some((name, value)) = line.trim_end().split_once(':') else {
            return (status, headers);
        };
        headers.push((name.to_ascii_lowercase(), value.trim().to_owned()));
    }
}

fn unchunk(mut bytes: &[u8]) -> Vec<u8> {
    let mut whole = Vec::new();
    while let Some(end) = bytes.windows(2).position(|w| w == b"\r\n") {
        let size = std::str::from_utf8(&bytes[..end])
            .ok()
            .and_then(|s| usize::from_str_radix(s, 16).ok())
            .unwrap_or(0);
        if size == 0 {
            break;
        }
        whole.extend_from_slice(&bytes[end + 2..end + 2 + size]);
        bytes = &bytes[end + 4 + size..];
    }
    whole
}
