//! The little HTTP that is needed towards others: one question, one answer. Redirects are not followed, no proxy is asked, and
//! an answer has limits of time and size.

use std::fmt;
use std::path::Path;
use std::str::FromStr;
use std::sync::Arc;
use std::time::Duration;

use tokio_rustls::rustls::{self, crypto};
use ureq::Agent;
use ureq::http::Uri;
use ureq::http::header::{ACCEPT, AUTHORIZATION};
use ureq::http::uri::Scheme;
use ureq::tls::{Certificate, RootCerts, TlsConfig};

use crate::serve::{TlsError, Token, read_certificates};

/// Longest answer, bytes.
const MOST: u64 = 256 << 20;

/// `http://host:port` or `https://host:port`, and the path that may follow.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Address {
    /// Without a slash at its end.
    base: String,
}

/// Why a text is no address.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("{0:?} is not an address; write http://host:port or https://host:port")]
pub struct AddressError(String);

/// Why there is no answer.
#[derive(Debug, thiserror::Error)]
pub enum CallError {
    /// Nothing was reached, it is not trusted, the connection broke, or what answered speaks something else.
    #[error(transparent)]
    Call(Box<ureq::Error>),
    /// An answer with another status than success.
    #[error("it answers {status}")]
    Status {
        /// The status.
        status: u16,
    },
}

impl CallError {
    /// Whether what answered shows a certificate that is not trusted.
    pub fn is_distrust(&self) -> bool {
        let CallError::Call(error) = self else { return false };
        let refused = |error: &rustls::Error| matches!(error, rustls::Error::InvalidCertificate(_));
        match &**error {
            ureq::Error::Rustls(error) => refused(error),
            ureq::Error::Io(error) => {
                error.get_ref().and_then(|error| error.downcast_ref()).is_some_and(refused)
            }
            _ => false,
        }
    }
}

impl From<ureq::Error> for CallError {
    fn from(error: ureq::Error) -> CallError {
        CallError::Call(Box::new(error))
    }
}

impl FromStr for Address {
    type Err = AddressError;

    fn from_str(text: &str) -> Result<Address, AddressError> {
        let refuse = || AddressError(text.chars().take(100).collect());
        let uri: Uri = text.parse().map_err(|_| refuse())?;
        let web = uri.scheme().is_some_and(|scheme| *scheme == Scheme::HTTP || *scheme == Scheme::HTTPS);
        let host = uri.authority().is_some_and(|authority| !authority.as_str().contains('@'));
        if !web || !host || uri.query().is_some() || text.contains('#') {
            return Err(refuse());
        }
        Ok(Address { base: text.trim_end_matches('/').to_owned() })
    }
}

impl fmt::Display for Address {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.base)
    }
}

/// One who asks. Whom it trusts is decided once.
#[derive(Clone, Debug)]
pub struct Client(Agent);

impl Client {
    /// Trusts the certificates in a PEM file, or without one those of the system (or of `SSL_CERT_FILE`). `patience` is had
    /// with every step: the name, the connection, the question, the head of the answer, its body.
    ///
    /// # Errors
    /// [`TlsError`] where the file holds no certificate.
    pub fn new(trust: Option<&Path>, patience: Duration) -> Result<Client, TlsError> {
        let roots = match trust {
            None => RootCerts::PlatformVerifier,
            Some(path) => {
                let chain = read_certificates(path)?;
                RootCerts::from(chain.iter().map(|one| Certificate::from_der(one).to_owned()))
            }
        };
        let tls = TlsConfig::builder()
            .root_certs(roots)
            .unversioned_rustls_crypto_provider(Arc::new(crypto::ring::default_provider()))
            .build();
        let patience = Some(patience);
        let agent = Agent::config_builder()
            .tls_config(tls)
            .http_status_as_error(false)
            .max_redirects(0)
            .max_redirects_will_error(false)
            .proxy(None)
            .user_agent(concat!("outwait/", env!("CARGO_PKG_VERSION")))
            .max_idle_connections(0)
            .timeout_resolve(patience)
            .timeout_connect(patience)
            .timeout_send_request(patience)
            .timeout_send_body(patience)
            .timeout_recv_response(patience)
            .timeout_recv_body(patience)
            .build();
        Ok(Client(agent.into()))
    }

    /// The body of a successful answer to `GET`; `path` begins with a slash.
    ///
    /// # Errors
    /// [`CallError`].
    pub fn get(&self, address: &Address, path: &str, token: Option<&Token>) -> Result<Vec<u8>, CallError> {
        let mut request = self.0.get(format!("{address}{path}")).header(ACCEPT, "application/json");
        if let Some(token) = token {
            request = request.header(AUTHORIZATION, token.bearer());
        }
        let mut answer = request.call()?;
        succeeded(answer.status().as_u16())?;
        Ok(answer.body_mut().with_config().limit(MOST).read_to_vec()?)
    }

    /// What is at an address, at most so many bytes of it, asked for with these headers.
    ///
    /// # Errors
    /// [`CallError`].
    pub fn fetch(&self, url: &str, headers: &[(&str, &str)], most: u64) -> Result<Vec<u8>, CallError> {
        let mut request = self.0.get(url);
        for (name, value) in headers {
            request = request.header(*name, *value);
        }
        let mut answer = request.call()?;
        succeeded(answer.status().as_u16())?;
        Ok(answer.body_mut().with_config().limit(most).read_to_vec()?)
    }

    /// Posts a body and takes any successful answer.
    ///
    /// # Errors
    /// [`CallError`]; a redirect is a status that is not success.
    pub fn post(&self, address: &Address, headers: &[(&str, String)], body: &[u8]) -> Result<(), CallError> {
        let mut request = self.0.post(address.to_string());
        for (name, value) in headers {
            request = request.header(*name, value);
        }
        succeeded(request.send(body)?.status().as_u16())
    }
}

fn succeeded(status: u16) -> Result<(), CallError> {
    if (200..300).contains(&status) { Ok(()) } else { Err(CallError::Status { status }) }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn addresses() {
        for (text, shown) in [
            ("http://127.0.0.1:7071/", "http://127.0.0.1:7071"),
            ("https://waits.fernhollow.example/outwait", "https://waits.fernhollow.example/outwait"),
        ] {
            assert_eq!(text.parse::<Address>().unwrap().to_string(), shown);
        }
        for bad in [
            "127.0.0.1:7071",
            "ftp://a",
            "http://",
            "http://a/\r\nX: y",
            "http://a:b@c/",
            "/v1",
            "http://a?b",
            "http://a/#b",
        ] {
            assert!(bad.parse::<Address>().is_err(), "{bad}");
        }
    }
}
