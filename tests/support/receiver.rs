//! A small HTTP receiver on 127.0.0.1 that keeps every request it was sent, and misbehaves as it is told.
//!
//! It waits for states, never for times: a receiver that hangs holds its connection until the mode changes.

// Each test binary that includes this file uses a part of it.
#![allow(dead_code)]

use std::net::SocketAddr;
use std::sync::{Arc, Mutex};
use std::time::Duration;

use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::{TcpListener, TcpSocket, TcpStream};
use tokio::sync::watch;
use tokio::task::JoinHandle;

/// How the receiver answers.
#[derive(Clone, Debug, PartialEq)]
pub(crate) enum Mode {
    /// 204.
    Ok,
    /// This answer with this body, and these header lines, each with its `\r\n`.
    Answer { status: u16, headers: String, body: Vec<u8> },
    /// Nobody listens: the connection is refused.
    Refuse,
    /// Reads the request and never answers.
    Hang,
    /// Reads the request and closes without a word.
    CloseEarly,
    /// Closes in the middle of the answer's headers.
    CloseInHeaders,
    /// Closes in the middle of the answer's body.
    CloseInBody { status: u16 },
    /// Sends the answer's headers byte by byte and never comes to their end.
    SlowHeaders,
    /// Sends headers without end, as fast as they are read.
    EndlessHeaders,
    /// Sends an answer whose body never ends, as fast as it is read.
    EndlessBody { status: u16 },
}

impl Mode {
    pub(crate) fn status(status: u16) -> Self {
        Mode::Answer { status, headers: String::new(), body: Vec::new() }
    }

    pub(crate) fn with_body(status: u16, body: &str) -> Self {
        Mode::Answer { status, headers: String::new(), body: body.into() }
    }

    pub(crate) fn retry_after(status: u16, value: &str) -> Self {
        Mode::Answer { status, headers: format!("Retry-After: {value}\r\n"), body: Vec::new() }
    }

    pub(crate) fn redirect(location: &str) -> Self {
        Mode::Answer { status: 307, headers: format!("Location: {location}\r\n"), body: Vec::new() }
    }

    /// An answer of 65 kB that swells to 10 MB for whoever decompresses it.
    pub(crate) fn bomb(status: u16) -> Self {
        Mode::Answer { status, headers: "Content-Encoding: gzip\r\n".into(), body: gzip_of_zeros(40_000) }
    }
}

/// One request as it came.
#[derive(Clone, Debug, PartialEq)]
pub(crate) struct Recorded {
    /// `POST /path HTTP/1.1`.
    pub(crate) line: String,
    /// Names in lower case.
    pub(crate) headers: Vec<(String, String)>,
    pub(crate) body: Vec<u8>,
    /// Whether it was answered with a 2xx.
    pub(crate) taken: bool,
}

impl Recorded {
    pub(crate) fn header(&self, name: &str) -> Option<&str> {
        self.headers.iter().find(|(n, _)| n == name).map(|(_, value)| value.as_str())
    }

    pub(crate) fn json(&self) -> serde_json::Value {
        serde_json::from_slice(&self.body).expect("the body is JSON")
    }
}

/// The receiver; dropping it closes it.
pub(crate) struct TestReceiver {
    address: SocketAddr,
    mode: watch::Sender<Mode>,
    requests: Arc<Mutex<Vec<Recorded>>>,
    /// How many requests have been recorded.
    count: watch::Receiver<usize>,
    task: JoinHandle<()>,
    applied: watch::Receiver<Mode>,
}

impl Drop for TestReceiver {
    fn drop(&mut self) {
        self.task.abort();
    }
}

impl TestReceiver {
    pub(crate) async fn start(mode: Mode) -> Self {
        // The port stays ours while nobody listens on it: a socket that is bound and doesn't listen refuses.
        let socket = bound("127.0.0.1:0".parse().expect("an address"));
        let address = socket.local_addr().expect("a bound socket has an address");
        let (mode, modes) = watch::channel(mode);
        let (counted, count) = watch::channel(0);
        let (apply, applied) = watch::channel(Mode::Refuse);
        let requests = Arc::new(Mutex::new(Vec::new()));
        let log = Log { requests: requests.clone(), counted: Arc::new(counted) };
        let task = tokio::spawn(serve(socket, address, modes, apply, log));
        let mut receiver = TestReceiver { address, mode, requests, count, task, applied };
        receiver.wait_applied().await;
        receiver
    }

    pub(crate) fn url(&self) -> String {
        format!("http://{}/notice", self.address)
    }

    /// Answers the next request in this way; when it returns the way is in force.
    pub(crate) async fn set(&mut self, mode: Mode) {
        self.mode.send_replace(mode);
        self.wait_applied().await;
    }

    async fn wait_applied(&mut self) {
        let wanted = self.mode.borrow().clone();
        self.applied.wait_for(|mode| *mode == wanted).await.expect("the receiver's task lives");
    }

    /// Everything that has come so far.
    pub(crate) fn requests(&self) -> Vec<Recorded> {
        self.requests.lock().expect("no test panicked with the lock").clone()
    }

    /// Waits until `n` requests have come.
    pub(crate) async fn wait_for(&self, n: usize) {
        self.count.clone().wait_for(|count| *count >= n).await.expect("the receiver's task lives");
    }
}

#[derive(Clone)]
struct Log {
    requests: Arc<Mutex<Vec<Recorded>>>,
    counted: Arc<watch::Sender<usize>>,
}

impl Log {
    fn add(&self, recorded: Recorded) {
        let mut requests = self.requests.lock().expect("no test panicked with the lock");
        requests.push(recorded);
        self.counted.send_replace(requests.len());
    }
}

fn bound(address: SocketAddr) -> TcpSocket {
    let socket = TcpSocket::new_v4().expect("a socket");
    socket.set_reuseaddr(true).expect("an option of the socket");
    socket.bind(address).expect("the port is free");
    socket
}

async fn serve(
    socket: TcpSocket,
    address: SocketAddr,
    mut modes: watch::Receiver<Mode>,
    apply: watch::Sender<Mode>,
    log: Log,
) {
    let mut connections = tokio::task::JoinSet::new();
    let mut idle = Some(socket);
    let mut listening: Option<TcpListener> = None;
    loop {
        let mode = modes.borrow_and_update().clone();
        if mode == Mode::Refuse {
            if listening.take().is_some() {
                idle = Some(bound(address));
            }
        } else if let Some(socket) = idle.take() {
            listening = Some(socket.listen(64).expect("the socket listens"));
        }
        apply.send_replace(mode);
        let accepted = async {
            match &listening {
                Some(listener) => listener.accept().await,
                None => std::future::pending().await,
            }
        };
        tokio::select! {
            changed = modes.changed() => if changed.is_err() { return },
            accepted = accepted => if let Ok((stream, _)) = accepted {
                connections.spawn(answer(stream, modes.clone(), log.clone()));
            }
        }
    }
}

/// Answers one request on `stream`; a broken connection ends it.
async fn answer(mut stream: TcpStream, mut modes: watch::Receiver<Mode>, log: Log) -> std::io::Result<()> {
    let Some(mut request) = read_request(&mut stream).await? else { return Ok(()) };
    let mode = modes.borrow_and_update().clone();
    request.taken = match &mode {
        Mode::Ok => true,
        Mode::Answer { status, .. } | Mode::CloseInBody { status } | Mode::EndlessBody { status } => {
            (200..300).contains(status)
        }
        _ => false,
    };
    log.add(request);
    match mode {
        Mode::Ok => stream.write_all(b"HTTP/1.1 204 No Content\r\n\r\n").await?,
        Mode::Answer { status, headers, body } => {
            let head = format!("HTTP/1.1 {status} Said\r\n{headers}Content-Length: {}\r\n\r\n", body.len());
            stream.write_all(head.as_bytes()).await?;
            stream.write_all(&body).await?;
        }
        Mode::Refuse | Mode::CloseEarly => {}
        Mode::Hang => {
            let _ = modes.changed().await;
        }
        Mode::CloseInHeaders => stream.write_all(b"HTTP/1.1 200 OK\r\nContent-Le").await?,
        Mode::CloseInBody { status } => {
            stream
                .write_all(format!("HTTP/1.1 {status} Said\r\nContent-Length: 100\r\n\r\nhalf").as_bytes())
                .await?;
        }
        Mode::SlowHeaders => {
            stream.write_all(b"HTTP/1.1 200 OK\r\nX-Slow: ").await?;
            while !modes.has_changed().unwrap_or(true) {
                stream.write_all(b"x").await?;
                tokio::time::sleep(Duration::from_millis(5)).await;
            }
        }
        Mode::EndlessHeaders => {
            stream.write_all(b"HTTP/1.1 200 OK\r\nX-Endless: ").await?;
            loop {
                stream.write_all(&[b'x'; 4096]).await?;
            }
        }
        Mode::EndlessBody { status } => {
            stream.write_all(format!("HTTP/1.1 {status} Said\r\n\r\n").as_bytes()).await?;
            loop {
                stream.write_all(&[b'x'; 4096]).await?;
            }
        }
    }
    stream.shutdown().await
}

async fn read_request(stream: &mut TcpStream) -> std::io::Result<Option<Recorded>> {
    let mut bytes = Vec::new();
    let head_end = loop {
        if let Some(at) = bytes.windows(4).position(|four| four == b"\r\n\r\n") {
            break at;
        }
        if stream.read_buf(&mut bytes).await? == 0 {
            return Ok(None);
        }
    };
    let head = String::from_utf8_lossy(&bytes[..head_end]).into_owned();
    let mut lines = head.split("\r\n");
    let line = lines.next().unwrap_or_default().to_owned();
    let headers: Vec<_> = lines
        .filter_map(|line| line.split_once(':'))
        .map(|(name, value)| (name.to_ascii_lowercase(), value.trim().to_owned()))
        .collect();
    let length = headers.iter().find(|(name, _)| name == "content-length");
    let length = length.and_then(|(_, value)| value.parse().ok()).unwrap_or(0);
    let mut body = bytes.split_off(head_end + 4);
    while body.len() < length {
        if stream.read_buf(&mut body).await? == 0 {
            return Ok(None);
        }
    }
    Ok(Some(Recorded { line, headers, body, taken: false }))
}

/// A gzip file (RFC 1952) of one deflate block with fixed codes (RFC 1951 3.2.6): a zero, then `runs` times "258
/// bytes as the one before", 13 bits each.
fn gzip_of_zeros(runs: u32) -> Vec<u8> {
    let mut bits = Bits::default();
    bits.push(1, 1); // the last block
    bits.push(1, 2); // fixed codes
    bits.push_code(0b0011_0000, 8); // literal 0
    for _ in 0..runs {
        bits.push_code(0b1100_0101, 8); // length 258
        bits.push_code(0, 5); // distance 1
    }
    bits.push_code(0, 7); // end of block
    let mut gzip = vec![0x1f, 0x8b, 8, 0, 0, 0, 0, 0, 0, 255];
    gzip.extend(bits.bytes);
    // Whoever comes as far as the check sum has already swollen: a false one is as good.
    gzip.extend([0; 4]);
    gzip.extend((runs * 258 + 1).to_le_bytes());
    gzip
}

#[derive(Default)]
struct Bits {
    bytes: Vec<u8>,
    used: u8,
}

impl Bits {
    /// Plain numbers go in from their least significant bit.
    fn push(&mut self, number: u32, width: u8) {
        for i in 0..width {
            if self.used == 0 {
                self.bytes.push(0);
            }
            if let Some(last) = self.bytes.last_mut() {
                *last |= ((number >> i & 1) as u8) << self.used;
            }
            self.used = (self.used + 1) % 8;
        }
    }

    /// Codes go in from their most significant bit.
    fn push_code(&mut self, code: u32, width: u8) {
        for i in (0..width).rev() {
            self.push(code >> i & 1, 1);
        }
    }
}
