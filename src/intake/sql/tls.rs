//! TLS to a PostgreSQL server, by rustls.

use std::future::Future;
use std::io;
use std::path::Path;
use std::pin::Pin;
use std::sync::Arc;
use std::task::{Context, Poll};

use postgres::Socket;
use postgres::tls::{ChannelBinding, MakeTlsConnect, TlsConnect, TlsStream};
use rustls_pki_types::pem::PemObject;
use rustls_pki_types::{CertificateDer, ServerName};
use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};
use tokio_rustls::rustls::{ClientConfig, RootCertStore};
use tokio_rustls::{TlsConnector, client};

use super::QueryError;

/// Whom to trust.
#[derive(Clone)]
pub(super) struct Tls(Arc<ClientConfig>);

impl Tls {
    /// The authorities in a file (PEM), and no others.
    pub(super) fn trusting(file: &Path) -> Result<Tls, QueryError> {
        let refuse = |reason: String| QueryError::Address {
            reason: format!("the authorities in {}: {reason}", file.display()),
        };
        let mut roots = RootCertStore::empty();
        let certificates = CertificateDer::pem_file_iter(file).map_err(|error| refuse(error.to_string()))?;
        for certificate in certificates {
            let certificate = certificate.map_err(|error| refuse(error.to_string()))?;
            roots.add(certificate).map_err(|error| refuse(error.to_string()))?;
        }
        if roots.is_empty() {
            return Err(refuse("there is no certificate in it".into()));
        }
        let provider = Arc::new(tokio_rustls::rustls::crypto::ring::default_provider());
        let config = ClientConfig::builder_with_provider(provider)
            .with_safe_default_protocol_versions()
            .map_err(|error| refuse(error.to_string()))?
            .with_root_certificates(roots)
            .with_no_client_auth();
        Ok(Tls(Arc::new(config)))
    }
}

impl MakeTlsConnect<Socket> for Tls {
    type Stream = Stream;
    type TlsConnect = Handshake;
    type Error = rustls_pki_types::InvalidDnsNameError;

    fn make_tls_connect(&mut self, domain: &str) -> Result<Handshake, Self::Error> {
        let name = ServerName::try_from(domain)?.to_owned();
        Ok(Handshake { connector: TlsConnector::from(Arc::clone(&self.0)), name })
    }
}

/// What is needed to shake hands with one server.
pub(super) struct Handshake {
    connector: TlsConnector,
    name: ServerName<'static>,
}

impl TlsConnect<Socket> for Handshake {
    type Stream = Stream;
    type Error = io::Error;
    type Future = Pin<Box<dyn Future<Output = io::Result<Stream>> + Send>>;

    fn connect(self, socket: Socket) -> Self::Future {
        Box::pin(async move { self.connector.connect(self.name, socket).await.map(Stream) })
    }
}

/// A connection over TLS.
pub(super) struct Stream(client::TlsStream<Socket>);

impl TlsStream for Stream {
    fn channel_binding(&self) -> ChannelBinding {
        ChannelBinding::none()
    }
}

impl AsyncRead for Stream {
    fn poll_read(
        mut self: Pin<&mut Self>,
        cx: &mut Context<'_>,
        buf: &mut ReadBuf<'_>,
    ) -> Poll<io::Result<()>> {
        Pin::new(&mut self.0).poll_read(cx, buf)
    }
}

impl AsyncWrite for Stream {
    fn poll_write(mut self: Pin<&mut Self>, cx: &mut Context<'_>, buf: &[u8]) -> Poll<io::Result<usize>> {
        Pin::new(&mut self.0).poll_write(cx, buf)
    }

    fn poll_flush(mut self: Pin<&mut Self>, cx: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.0).poll_flush(cx)
    }

    fn poll_shutdown(mut self: Pin<&mut Self>, cx: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.0).poll_shutdown(cx)
    }
}
