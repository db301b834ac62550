//! A client of a few lines: what is sent is seen byte by byte.

use std::io::{Read, Write};
use std::net::{SocketAddr, TcpStream};
use std::time::Duration;

/// An answer.
#[derive(Debug)]
pub(crate) struct Answer {
    pub(crate) status: u16,
    pub(crate) headers: Vec<(String, String)>,
    pub(crate) body: Vec<u8>,
}

impl Answer {
    pub(crate) fn header(&self, name: &str) -> Option<&str> {
        self.headers.iter().find(|(n, _)| n.eq_ignore_ascii_case(name)).map(|(_, value)| value.as_str())
    }

    pub(crate) fn text(&self) -> &str {
        std::str::from_utf8(&self.body).unwrap()
    }

    pub(crate) fn json(&self) -> serde_json::Value {
        serde_json::from_slice(&self.body).unwrap_or_else(|error| panic!("{error}: {}", self.text()))
    }
}

/// Sends one request on a connection of its own.
pub(crate) fn ask(to: SocketAddr, method: &str, path: &str, headers: &[(&str, &str)], body: &[u8]) -> Answer {
    let mut stream = TcpStream::connect(to).unwrap();
    stream.set_read_timeout(Some(Duration::from_secs(60))).unwrap();
    write_request(&mut stream, method, path, headers, body).unwrap();
    read_answer(&mut stream).unwrap()
}

pub(crate) fn get(to: SocketAddr, path: &str) -> Answer {
    ask(to, "GET", path, &[], b"")
}

pub(crate) fn post(to: SocketAddr, body: &[u8]) -> Answer {
    ask(to, "POST", "/v1/waits", &[("Content-Type", "application/x-ndjson")], body)
}

pub(crate) fn write_request(
    stream: &mut impl Write,
    method: &str,
    path: &str,
    headers: &[(&str, &str)],
    body: &[u8],
) -> std::io::Result<()> {
    let mut head = format!("{method} {path} HTTP/1.1\r\nHost: test\r\nConnection: close\r\n");
    for (name, value) in headers {
        head += &format!("{name}: {value}\r\n");
    }
    if !body.is_empty() || method == "POST" {
        head += &format!("Content-Length: {}\r\n", body.len());
    }
    stream.write_all((head + "\r\n").as_bytes())?;
    stream.write_all(body)
}

/// Reads to the end of the connection.
pub(crate) fn read_answer(stream: &mut impl Read) -> std::io::Result<Answer> {
    let mut bytes = Vec::new();
    match stream.read_to_end(&mut bytes) {
        Ok(_) => {}
        // Some servers cut the line after they have said all.
        Err(_) if !bytes.is_empty() => {}
        Err(error) => return Err(error),
    }
    let end = bytes.windows(4).position(|w| w == b"\r\n\r\n").ok_or(std::io::ErrorKind::UnexpectedEof)?;
    let head = String::from_utf8(bytes[..end].to_vec()).unwrap();
    let mut lines = head.split("\r\n");
    let status = lines.next().unwrap().split(' ').nth(1).unwrap().parse().unwrap();
    let headers: Vec<(String, String)> = lines
        .map(|line| line.split_once(": ").unwrap())
        .map(|(name, value)| (name.to_ascii_lowercase(), value.to_owned()))
        .collect();
    let mut body = bytes.split_off(end + 4);
    if headers.iter().any(|(name, value)| name == "transfer-encoding" && value == "chunked") {
        body = unchunk(&body);
    }
    Ok(Answer { status, headers, body })
}

fn unchunk(mut rest: &[u8]) -> Vec<u8> {
    let mut all = Vec::new();
    loop {
        let end = rest.windows(2).position(|w| w == b"\r\n").unwrap();
        let length = usize::from_str_radix(std::str::from_utf8(&rest[..end]).unwrap(), 16).unwrap();
        if length == 0 {
            return all;
        }
        all.extend_from_slice(&rest[end + 2..end + 2 + length]);
        rest = &rest[end + 4 + length..];
    }
}
