//! The demo's own receiver of notices: a small HTTP server on the loopback address.

use std::io::{BufRead, BufReader, Read, Write};
use std::net::{SocketAddr, TcpListener, TcpStream};

use tokio::sync::mpsc;

/// A notice that arrived.
pub(super) struct Call {
    /// `raised` or `returned`.
    pub(super) kind: String,
    /// What a person reads.
    pub(super) text: String,
}

/// Listens until the program ends.
pub(super) struct Phone {
    address: SocketAddr,
}

impl Phone {
    /// Starts to listen on a free port; every notice is passed on to `calls`.
    pub(super) fn start(calls: mpsc::UnboundedSender<Call>) -> anyhow::Result<Self> {
        let listener = TcpListener::bind("127.0.0.1:0")?;
        let address = listener.local_addr()?;
        std::thread::Builder::new().name("demo receiver".to_owned()).spawn(move || {
            for stream in listener.incoming().flatten() {
                // A connection that breaks is the sender's to repeat.
                if let Ok(Some(call)) = take(stream)
                    && calls.send(call).is_err()
                {
                    return;
                }
            }
        })?;
        Ok(Phone { address })
    }

    pub(super) fn url(&self) -> String {
        format!("http://{}/notice", self.address)
    }
}

/// Reads one POST and answers it.
fn take(mut stream: TcpStream) -> anyhow::Result<Option<Call>> {
    let mut reader = BufReader::new(stream.try_clone()?);
    let mut length = 0;
    loop {
        let mut line = String::new();
        if reader.read_line(&mut line)? == 0 {
            return Ok(None);
        }
        if line == "\r\n" {
            break;
        }
        if let Some(value) = line.to_ascii_lowercase().strip_prefix("content-length:") {
            length = value.trim().parse()?;
        }
    }
    let mut body = Vec::new();
    reader.take(length).read_to_end(&mut body)?;
    stream.write_all(b"HTTP/1.1 204 No Content\r\nConnection: close\r\n\r\n")?;
    let notice: serde_json::Value = serde_json::from_slice(&body)?;
    let word = |key: &str| notice[key].as_str().unwrap_or_default().to_owned();
    Ok(Some(Call { kind: word("kind"), text: word("text") }))
}
