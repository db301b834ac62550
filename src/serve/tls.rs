//! Certificate and key from PEM files.

use std::path::{Path, PathBuf};
use std::sync::Arc;

use rustls_pki_types::pem::PemObject;
use rustls_pki_types::{CertificateDer, PrivateKeyDer, pem};
use tokio_rustls::rustls::{self, ServerConfig, crypto};

/// Why TLS cannot be served.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum TlsError {
    /// A file holds nothing of the kind.
    #[error("cannot read {what} from {}: {source}", path.display())]
    Pem {
        /// What was looked for.
        what: &'static str,
        /// The file.
        path: PathBuf,
        /// Why.
        source: pem::Error,
    },
    /// Certificate and key do not go together, or are of a kind that is not served.
    #[error("the certificate and its key cannot be used: {0}")]
    Unusable(#[from] rustls::Error),
}

/// Reads a chain of certificates and its key.
///
/// # Errors
/// [`TlsError`].
pub fn read_tls(certificate: &Path, key: &Path) -> Result<Arc<ServerConfig>, TlsError> {
    let chain = read_certificates(certificate)?;
    let key = PrivateKeyDer::from_pem_file(key).map_err(unread("a private key", key))?;
    let mut config = ServerConfig::builder_with_provider(Arc::new(crypto::ring::default_provider()))
        .with_safe_default_protocol_versions()?
        .with_no_client_auth()
        .with_single_cert(chain, key)?;
    config.alpn_protocols = vec![b"http/1.1".to_vec()];
    Ok(Arc::new(config))
}

/// Reads the certificates in a PEM file, one at the least.
///
/// # Errors
/// [`TlsError::Pem`].
pub fn read_certificates(path: &Path) -> Result<Vec<CertificateDer<'static>>, TlsError> {
    CertificateDer::pem_file_iter(path)
        .and_then(Iterator::collect::<Result<Vec<_>, _>>)
        .and_then(|chain| if chain.is_empty() { Err(pem::Error::NoItemsFound) } else { Ok(chain) })
        .map_err(unread("a certificate", path))
}

fn unread(what: &'static str, path: &Path) -> impl FnOnce(pem::Error) -> TlsError {
    let path = path.to_owned();
    move |source| TlsError::Pem { what, path, source }
}
