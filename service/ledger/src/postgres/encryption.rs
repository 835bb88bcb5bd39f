//! Encrypted connections, on which the server's certificate is always verified.

use std::path::Path;
use std::sync::Arc;

use rustls::pki_types::CertificateDer;
use rustls::pki_types::pem::PemObject;
use rustls::{ClientConfig, RootCertStore, crypto};
use tokio_postgres_rustls::MakeRustlsConnect;

/// What makes connections that are encrypted: verified against the certificates in a file, or against
/// those of the system.
///
/// # Errors
/// What is wrong with the certificates.
pub(super) fn connector(roots: Option<&Path>) -> Result<MakeRustlsConnect, String> {
    let certificates = match roots {
        Some(path) => read(path)?,
        None => rustls_native_certs::load_native_certs().certs,
    };
    let mut store = RootCertStore::empty();
    let (known, _) = store.add_parsable_certificates(certificates);
    if known == 0 {
        return Err("there are no certificates to verify the server's against; name a file: \
                    `sslrootcert=/path/to/certificates.pem`"
            .into());
    }
    let config = ClientConfig::builder_with_provider(Arc::new(crypto::ring::default_provider()))
        .with_safe_default_protocol_versions()
        .map_err(|error| error.to_string())?
        .with_root_certificates(store)
        .with_no_client_auth();
    Ok(MakeRustlsConnect::new(config))
}

fn read(path: &Path) -> Result<Vec<CertificateDer<'static>>, String> {
    CertificateDer::pem_file_iter(path)
        .and_then(Iterator::collect)
        .map_err(|error| format!("the certificates in `{}` cannot be read: {error}", path.display()))
}
