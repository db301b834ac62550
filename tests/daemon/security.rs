//! Who may ask, and how much is taken.

use std::io::{Read, Write};
use std::net::TcpStream;
use std::os::unix::fs::PermissionsExt;
use std::sync::Arc;
use std::time::{Duration, Instant};

use outwait::serve::{Token, read_tls, read_token};

use crate::client::{ask, get, post, read_answer, write_request};
use crate::house::House;

const LINE: &[u8] = br#"{"stream":"desk.loan","elapsed":1.5}"#;

fn token(text: &str) -> Result<Token, outwait::serve::SecretError> {
    let file = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(file.path(), text).unwrap();
    read_token(file.path())
}

#[test]
fn a_token_is_asked_for() {
    let secret = "4dd65e0c-not-guessed";
    let house = House::with(|config| config.token = Some(token(secret).unwrap()));
    let shown =
        |value: &str, path: &str| ask(house.address, "GET", path, &[("Authorization", value)], b"").status;
    for path in ["/v1/advice", "/metrics", "/v1/open", "/v1/health", "/", "/v1/openapi.json", "/nowhere"] {
        let refused = get(house.address, path);
        assert_eq!((refused.status, refused.header("www-authenticate").is_some()), (401, true), "{path}");
        assert_eq!(shown("Bearer 4dd65e0c-not-guessee", path), 401, "{path}");
        assert_eq!(shown(secret, path), 401, "{path}");
        assert_ne!(shown(&format!("bearer {secret}"), path), 401, "{path}");
    }
    assert_eq!(post(house.address, LINE).status, 401);
    assert_eq!(
        ask(house.address, "POST", "/v1/waits", &[("Authorization", &format!("Bearer {secret}"))], LINE)
            .status,
        200
    );
    // Liveness tells nothing of the data.
    assert_eq!((get(house.address, "/healthz").status, get(house.address, "/readyz").status), (200, 200));
}

#[test]
fn tokens_come_from_files_of_their_own() {
    assert!(token("short").is_err() && token("").is_err() && token("with a space in the middle").is_err());
    let good = token("0123456789abcdef\n").unwrap();
    assert!(good.is(b"0123456789abcdef") && !good.is(b"0123456789abcdeg") && !good.is(b"0123456789abcde"));
    assert_eq!(format!("{good:?}"), "Token(..)");
    let file = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(file.path(), "0123456789abcdef").unwrap();
    std::fs::set_permissions(file.path(), std::fs::Permissions::from_mode(0o644)).unwrap();
    assert!(read_token(file.path()).unwrap_err().to_string().contains("600"));
    assert!(read_token(std::path::Path::new("no/such/file")).is_err());
}

#[test]
fn https_with_a_certificate() {
    use tokio_rustls::rustls::{ClientConfig, ClientConnection, RootCertStore, StreamOwned, crypto};
    let folder = tempfile::tempdir().unwrap();
    let made = rcgen::generate_simple_self_signed(vec!["localhost".into()]).unwrap();
    let (certificate, key) = (folder.path().join("tls.crt"), folder.path().join("tls.key"));
    std::fs::write(&certificate, made.cert.pem()).unwrap();
    std::fs::write(&key, made.signing_key.serialize_pem()).unwrap();
    let house = House::with(|config| config.tls = Some(read_tls(&certificate, &key).unwrap()));
    let mut roots = RootCertStore::empty();
    roots.add(made.cert.der().clone()).unwrap();
    let client = ClientConfig::builder_with_provider(Arc::new(crypto::ring::default_provider()))
        .with_safe_default_protocol_versions()
        .unwrap()
        .with_root_certificates(roots)
        .with_no_client_auth();
    let name = "localhost".try_into().unwrap();
    let session = ClientConnection::new(Arc::new(client), name).unwrap();
    let mut stream = StreamOwned::new(session, TcpStream::connect(house.address).unwrap());
    write_request(&mut stream, "POST", "/v1/waits", &[], LINE).unwrap();
    assert_eq!(read_answer(&mut stream).unwrap().status, 200);
    // Plain HTTP gets no answer there.
    let mut plain = TcpStream::connect(house.address).unwrap();
    write_request(&mut plain, "GET", "/healthz", &[], b"").unwrap();
    let mut bytes = Vec::new();
    let _ = plain.read_to_end(&mut bytes);
    assert!(!bytes.starts_with(b"HTTP"), "{bytes:?}");
    // The key of another certificate.
    let other = rcgen::generate_simple_self_signed(vec!["localhost".into()]).unwrap();
    std::fs::write(&key, other.signing_key.serialize_pem()).unwrap();
    assert!(read_tls(&certificate, &key).is_err());
    assert!(read_tls(&key, &certificate).is_err());
}

#[test]
fn every_limit_has_its_error() {
    let house = House::with(|config| {
        config.limits.body_bytes = 4_000;
        config.limits.unpacked_bytes = 100_000;
        config.limits.line_bytes = 1_000;
        config.ledger.most_streams = 3;
        config.ledger.most_open = 3;
    });
    let problem = |body: &[u8], headers: &[(&str, &str)]| {
        let answer = ask(house.address, "POST", "/v1/waits", headers, body);
        (answer.status, answer.json()["type"].as_str().map(str::to_owned).unwrap_or_default())
    };
    let urn = |code: &str| format!("urn:outwait:problem:{code}");
    assert_eq!(problem(&[b' '; 5_000], &[]), (413, urn("body")));
    // A bomb: a hundred thousand and one lines in a few hundred bytes.
    let bomb = zstd::encode_all("\n".repeat(10_000_000).as_bytes(), 3).unwrap();
    assert!(bomb.len() < 4_000);
    assert_eq!(problem(&bomb, &[]), (413, urn("unpacked")));
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::best());
    gzip.write_all(&LINE.repeat(20_000)).unwrap();
    let bomb = gzip.finish().unwrap();
    assert!(bomb.len() < 4_000, "{}", bomb.len());
    // One line of 700,000 bytes: too long a line before it is too long a body.
    let (status, _) = problem(&bomb, &[]);
    assert!(status == 413 || status == 400);
    let long = format!("{{\"stream\":\"a\",\"elapsed\":1,\"id\":\"{}\"}}\n", "x".repeat(1_500));
    assert_eq!(problem(long.as_bytes(), &[]).0, 400);
    let name = format!("{{\"stream\":\"{}\",\"elapsed\":1}}\n", "x".repeat(201));
    assert_eq!(problem(name.as_bytes(), &[]).0, 400);
    let many: String = (0..4).map(|i| format!("{{\"stream\":\"s{i}\",\"elapsed\":1}}\n")).collect();
    assert_eq!(problem(many.as_bytes(), &[]), (507, urn("limit")));
    let many: String =
        (0..4).map(|i| format!("{{\"stream\":\"s\",\"id\":\"{i}\",\"started\":1}}\n")).collect();
    assert_eq!(problem(many.as_bytes(), &[]), (507, urn("limit")));
    let key = "k".repeat(256);
    assert_eq!(problem(LINE, &[("Idempotency-Key", &key)]), (400, urn("key")));
    assert_eq!(problem(LINE, &[("Content-Type", "application/x-protobuf")]), (415, urn("media-type")));
    assert_eq!(problem(LINE, &[("Content-Encoding", "br")]), (415, urn("encoding")));
    assert_eq!(ask(house.address, "DELETE", "/v1/waits", &[], b"").status, 405);
    assert_eq!(ask(house.address, "DELETE", "/v1/waits", &[], b"").header("allow"), Some("POST"));
    // And after all that it takes what is good.
    assert_eq!(post(house.address, LINE).status, 200);
}

#[test]
fn slow_and_silent_clients_are_let_go() {
    let house = House::with(|config| {
        config.limits.head = Duration::from_millis(300);
        config.limits.body = Duration::from_millis(300);
        config.limits.connections = 8;
    });
    let began = Instant::now();
    // A head that never ends, one letter at a time, and a body that never comes.
    let mut head = TcpStream::connect(house.address).unwrap();
    head.write_all(b"POST /v1/waits HTTP/1.1\r\nHost: te").unwrap();
    let mut body = TcpStream::connect(house.address).unwrap();
    body.write_all(
        b"POST /v1/waits HTTP/1.1\r\nHost: test\r\nContent-Length: 100\r\nConnection: close\r\n\r\n{",
    )
    .unwrap();
    let answer = read_answer(&mut body).unwrap();
    assert_eq!((answer.status, &answer.json()["type"]), (408, &"urn:outwait:problem:slow-body".into()));
    let mut rest = Vec::new();
    let _ = head.read_to_end(&mut rest);
    assert!(began.elapsed() < Duration::from_secs(30));
    // All connections taken by silence: the next is told so, and has room once they are let go.
    let silent: Vec<TcpStream> = (0..8).map(|_| TcpStream::connect(house.address).unwrap()).collect();
    std::thread::sleep(Duration::from_millis(50));
    let mut one_more = TcpStream::connect(house.address).unwrap();
    let _ = write_request(&mut one_more, "GET", "/healthz", &[], b"");
    if let Ok(answer) = read_answer(&mut one_more) {
        assert_eq!(answer.status, 503);
        assert_eq!(answer.json()["status"], 503);
    }
    crate::house::until("room", || {
        let mut stream = TcpStream::connect(house.address).ok()?;
        write_request(&mut stream, "GET", "/healthz", &[], b"").ok()?;
        read_answer(&mut stream).ok().filter(|answer| answer.status == 200)
    });
    drop(silent);
}

#[test]
fn names_break_out_of_nothing() {
    let house = House::new();
    for name in ["a\\\"} 1", "a\\nb 2", "<script>", "../../etc", "a b"] {
        let line = format!("{{\"stream\":\"{name}\",\"elapsed\":1}}\n");
        let answer = post(house.address, line.as_bytes());
        if name != "../../etc" {
            assert_eq!(answer.status, 400, "{name}");
        }
    }
    let metrics = get(house.address, "/metrics");
    assert!(!metrics.text().contains("<script>"));
    let id = ask(house.address, "GET", "/healthz", &[("X-Request-Id", "own-id_7.2")], b"");
    assert_eq!(id.header("x-request-id"), Some("own-id_7.2"));
    let odd = ask(house.address, "GET", "/healthz", &[("X-Request-Id", "a\"b<c>")], b"");
    assert!(!odd.header("x-request-id").unwrap().contains('<'));
    // A path a client made up is told back as text in JSON only.
    let nowhere = get(house.address, "/%3Cscript%3E");
    assert_eq!(nowhere.header("content-type"), Some("application/problem+json"));
    assert_eq!(nowhere.header("x-content-type-options"), Some("nosniff"));
}
