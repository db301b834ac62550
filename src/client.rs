//! The little HTTP that is needed towards others: one question, one answer, over plain TCP. Redirects are not followed, and
//! an answer has limits of time and size.

use std::fmt;
use std::io::{self, Read, Write};
use std::net::{TcpStream, ToSocketAddrs};
use std::str::FromStr;
use std::time::Duration;

use crate::serve::Token;

/// Longest answer, bytes.
const MOST: u64 = 256 << 20;

/// `http://host:port` and what may follow.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Address {
    /// Host and port as they were written.
    authority: String,
    /// Without a slash at its end.
    path: String,
}

/// Why a text is no address.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("{0:?} is not an address of plain HTTP; write http://host:port (for HTTPS, put a relay beside it)")]
pub struct AddressError(String);

/// Why there is no answer.
#[derive(Debug, thiserror::Error)]
pub enum CallError {
    /// Nothing was reached, or the connection broke.
    #[error(transparent)]
    Io(#[from] io::Error),
    /// What answered speaks something else.
    #[error("the answer is not HTTP")]
    Garbled,
    /// An answer with another status than success.
    #[error("it answers {status}")]
    Status {
        /// The status.
        status: u16,
    },
}

impl FromStr for Address {
    type Err = AddressError;

    fn from_str(text: &str) -> Result<Address, AddressError> {
        let refuse = || AddressError(text.chars().take(100).collect());
        let rest = text.strip_prefix("http://").ok_or_else(refuse)?;
        let (authority, path) = rest.split_at(rest.find('/').unwrap_or(rest.len()));
        // Nothing that could begin another line of the request.
        let sound = |part: &str| part.bytes().all(|byte| byte.is_ascii_graphic());
        if authority.is_empty() || authority.contains('@') || !sound(rest) {
            return Err(refuse());
        }
        Ok(Address { authority: authority.to_owned(), path: path.trim_end_matches('/').to_owned() })
    }
}

impl fmt::Display for Address {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "http://{}{}", self.authority, self.path)
    }
}

/// The body of a successful answer to `GET`; `path` begins with a slash.
///
/// # Errors
/// [`CallError`].
pub fn get(address: &Address, path: &str, token: Option<&Token>) -> Result<Vec<u8>, CallError> {
    let mut headers = vec![("Accept", "application/json".to_owned())];
    headers.extend(token.map(|token| ("Authorization", token.bearer())));
    call(address, "GET", path, &headers, b"", Duration::from_secs(60))
}

/// Posts a body and takes any successful answer; `patience` over every step.
///
/// # Errors
/// [`CallError`]; a redirect is a status that is not success.
pub fn post(
    address: &Address,
    headers: &[(&str, String)],
    body: &[u8],
    patience: Duration,
) -> Result<(), CallError> {
    call(address, "POST", "", headers, body, patience).map(drop)
}

fn call(
    address: &Address,
    method: &str,
    path: &str,
    headers: &[(&str, String)],
    body: &[u8],
    patience: Duration,
) -> Result<Vec<u8>, CallError> {
    let mut stream = connect(&address.authority, patience)?;
    let mut target = format!("{}{path}", address.path);
    if target.is_empty() {
        target.push('/');
    }
    // 1.0, so that the answer is neither kept open nor sent in chunks (RFC 1945).
    let mut request = format!(
        "{method} {target} HTTP/1.0\r\nHost: {}\r\nUser-Agent: outwait/{}\r\nContent-Length: {}\r\n",
        address.authority,
        env!("CARGO_PKG_VERSION"),
        body.len()
    );
    for (name, value) in headers {
        request += &format!("{name}: {value}\r\n");
    }
    request += "\r\n";
    stream.write_all(request.as_bytes())?;
    stream.write_all(body)?;
    let mut answer = Vec::new();
    stream.take(MOST).read_to_end(&mut answer)?;
    let split = answer.windows(4).position(|four| four == b"\r\n\r\n").ok_or(CallError::Garbled)?;
    let head = std::str::from_utf8(&answer[..split]).map_err(|_| CallError::Garbled)?;
    let status = head.strip_prefix("HTTP/1.").and_then(|rest| rest.get(2..5)?.parse().ok());
    match status.ok_or(CallError::Garbled)? {
        200..300 => {}
        status => return Err(CallError::Status { status }),
    }
    let length = head.lines().find_map(|line| {
        let (name, value) = line.split_once(':')?;
        name.eq_ignore_ascii_case("content-length").then(|| value.trim().parse::<usize>().ok())?
    });
    answer.drain(..split + 4);
    if length.is_some_and(|length| length != answer.len()) {
        return Err(io::Error::new(io::ErrorKind::UnexpectedEof, "the answer broke off").into());
    }
    Ok(answer)
}

fn connect(authority: &str, patience: Duration) -> io::Result<TcpStream> {
    let named = if authority.rsplit_once(':').is_some_and(|(_, port)| port.parse::<u16>().is_ok()) {
        authority.to_owned()
    } else {
        format!("{authority}:80")
    };
    let mut last = io::Error::new(io::ErrorKind::NotFound, "the name has no address");
    for address in named.to_socket_addrs()? {
        match TcpStream::connect_timeout(&address, patience) {
            Ok(stream) => {
                stream.set_read_timeout(Some(patience))?;
                stream.set_write_timeout(Some(patience))?;
                return Ok(stream);
            }
            Err(error) => last = error,
        }
    }
    Err(last)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn addresses() {
        let address: Address = "http://127.0.0.1:7071/".parse().unwrap();
        assert_eq!(address.to_string(), "http://127.0.0.1:7071");
        for bad in ["127.0.0.1:7071", "https://a", "http://", "http://a/\r\nX: y", "http://a:b@c/"] {
            assert!(bad.parse::<Address>().is_err(), "{bad}");
        }
    }
}
