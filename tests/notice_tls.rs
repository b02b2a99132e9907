//! Notices over TLS: only to a receiver whose certificate the system trusts. The certificates under `support/tls`
//! were made for these tests; their authority's key is gone, and nothing outside trusts it.

use std::io::{Read, Write};
use std::net::{SocketAddr, TcpListener, TcpStream};
use std::path::{Path, PathBuf};
use std::process::Command;
use std::sync::Arc;
use std::thread::JoinHandle;

use chrono_tz::Tz;
use railtide::alarm::{AlarmKey, Delivery, Facts, Notice, NoticeKind, Outcome, Priority};
use railtide::clock::Clock;
use railtide::config::{Receiver, Route};
use railtide::notice::{Waiting, Worker};
use railtide::quantity::Utc;
use rustls::pki_types::pem::PemObject;
use rustls::pki_types::{CertificateDer, PrivateKeyDer};
use rustls::{ServerConfig, ServerConnection, StreamOwned};
use tokio::sync::mpsc;

/// The variable that names the roots to trust instead of the system's (OpenSSL's custom, kept by the library).
const ROOTS: &str = "SSL_CERT_FILE";
/// Tells a child process which of the receiver's certificates to show.
const SHOWN: &str = "RAILTIDE_TEST_SHOWN_CERTIFICATE";

fn tls(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/support/tls").join(name)
}

/// A receiver that takes one connection; gives back what it read inside TLS.
fn receive_once(certificate: &str) -> (SocketAddr, JoinHandle<Vec<u8>>) {
    let chain = vec![CertificateDer::from_pem_file(tls(certificate)).expect("a certificate")];
    let key = PrivateKeyDer::from_pem_file(tls("receiver-key.pem")).expect("a key");
    let provider = Arc::new(rustls::crypto::ring::default_provider());
    let config = ServerConfig::builder_with_provider(provider)
        .with_safe_default_protocol_versions()
        .and_then(|builder| builder.with_no_client_auth().with_single_cert(chain, key))
        .expect("certificate and key fit");
    let listener = TcpListener::bind("127.0.0.1:0").expect("a port");
    let address = listener.local_addr().expect("its address");
    let read = std::thread::spawn(move || {
        let (stream, _) = listener.accept().expect("somebody connects");
        let connection = ServerConnection::new(Arc::new(config)).expect("a connection");
        let mut read = Vec::new();
        // A client that refuses the certificate ends this with an error, and nothing read.
        let _ = converse(StreamOwned::new(connection, stream), &mut read);
        read
    });
    (address, read)
}

/// Reads until the JSON's last brace, then answers.
fn converse(mut tls: StreamOwned<ServerConnection, TcpStream>, read: &mut Vec<u8>) -> std::io::Result<()> {
    let mut some = [0; 4096];
    while !read.ends_with(b"}") {
        let n = tls.read(&mut some)?;
        if n == 0 {
            return Ok(());
        }
        read.extend_from_slice(&some[..n]);
    }
    tls.write_all(b"HTTP/1.1 204 No Content\r\n\r\n")?;
    tls.conn.send_close_notify();
    tls.flush()
}

async fn one_attempt(address: SocketAddr) -> Outcome {
    let route = Route::Webhook { url: format!("https://{address}/notice"), token: None };
    let receivers = vec![Receiver { name: "phone".into(), route, min_priority: Priority::Low }];
    let (report, mut outcomes) = mpsc::channel(4);
    let worker = Worker::spawn(receivers, Tz::UTC, Clock::system(), report).expect("the worker starts");
    let notice = Notice {
        id: 1,
        receiver: "phone".into(),
        kind: NoticeKind::Trial,
        priority: Priority::High,
        at: Utc(0),
        key: AlarmKey { condition: "trial".into(), subject: String::new() },
        raised_at: Utc(0),
        facts: Facts::default(),
        advice: String::new(),
        idempotency_key: "key-1".into(),
        recorded: true,
    };
    worker.send(vec![Waiting { notice, attempts: 0, body: None }]);
    outcomes.recv().await.expect("the worker lives")
}

/// Runs the test called `name` again in a process that trusts `roots`, with the receiver showing `certificate`.
fn in_a_process_that_trusts(roots: &str, certificate: &str, name: &str) {
    let exe = std::env::current_exe().expect("this test's own path");
    let output = Command::new(exe)
        .args(["--exact", name])
        .env(ROOTS, tls(roots))
        .env(SHOWN, certificate)
        .output()
        .expect("this test starts again");
    let said = String::from_utf8_lossy(&output.stdout);
    assert!(output.status.success() && said.contains("1 passed"), "{said}");
}

#[tokio::test]
async fn a_notice_goes_to_a_receiver_whose_certificate_the_system_trusts() {
    let Ok(shown) = std::env::var(SHOWN) else {
        let name = "a_notice_goes_to_a_receiver_whose_certificate_the_system_trusts";
        return in_a_process_that_trusts("authority.pem", "receiver.pem", name);
    };
    let (address, read) = receive_once(&shown);
    let outcome = one_attempt(address).await;
    assert!(matches!(outcome.delivery, Delivery::Delivered { .. }), "{}", outcome.said);
    assert!(read.join().expect("the receiver ends").ends_with(&outcome.body));
}

#[tokio::test]
async fn nothing_is_told_to_a_receiver_whose_certificate_is_a_strangers() {
    let Ok(shown) = std::env::var(SHOWN) else {
        let name = "nothing_is_told_to_a_receiver_whose_certificate_is_a_strangers";
        return in_a_process_that_trusts("stranger.pem", "receiver.pem", name);
    };
    refused(&shown, "UnknownIssuer").await;
}

#[tokio::test]
async fn nothing_is_told_to_a_receiver_whose_certificate_has_expired() {
    let Ok(shown) = std::env::var(SHOWN) else {
        let name = "nothing_is_told_to_a_receiver_whose_certificate_has_expired";
        return in_a_process_that_trusts("authority.pem", "expired.pem", name);
    };
    refused(&shown, "expired").await;
}

/// The attempt fails with `expected` in what is said, will be repeated, and nothing was read inside TLS.
async fn refused(certificate: &str, expected: &str) {
    let (address, read) = receive_once(certificate);
    let outcome = one_attempt(address).await;
    assert_eq!(outcome.delivery, Delivery::Waiting);
    assert!(outcome.said.contains(expected), "{}", outcome.said);
    assert_eq!(read.join().expect("the receiver ends"), b"");
}
