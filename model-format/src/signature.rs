//! Signatures of model files: Ed25519 (RFC 8032) over the 32 bytes of the fingerprint.
//!
//! A signature says that the holder of a key stands by every digit of a file. Whose key it is, the
//! reader must know from elsewhere: the key in the file is a name, no proof.

use ed25519_dalek::{Signer, SigningKey, VerifyingKey};
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use serde_json::Value;

use crate::cells::shorten;
use crate::check::Fault;
use crate::file::ModelFile;
use crate::fingerprint::{digest, hexadecimal};

/// The key of a model file under which its signature stands.
pub const SIGNATURE_KEY: &str = "signature";
/// What stands under `algorithm`.
pub const ED25519: &str = "ed25519";

/// The signature of a model file.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
pub struct Signature {
    /// `ed25519`.
    pub algorithm: String,
    /// The public key of the signer, 64 hexadecimal digits.
    pub key: String,
    /// The signature over the 32 bytes of the fingerprint, 128 hexadecimal digits.
    pub value: String,
}

/// Why a model file does not carry a signature by a key.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum SignatureError {
    /// The file has no signature.
    #[error("the file has no signature")]
    Absent,
    /// What stands under `signature` is none.
    #[error("`signature` cannot be read: {reason}")]
    Malformed {
        /// What is wrong with it.
        reason: String,
    },
    /// The signature is of a kind that this build cannot verify.
    #[error("signature algorithm `{found}` is not supported; this build verifies `{ED25519}`")]
    Algorithm {
        /// What stands under `algorithm`.
        found: String,
    },
    /// The file is signed by somebody else.
    #[error("the file is signed with the key {found}, not with {expected}")]
    OtherKey {
        /// The key in the file.
        found: String,
        /// The key that was asked for.
        expected: String,
    },
    /// The bytes are no public key.
    #[error("{key} is no Ed25519 public key")]
    Key {
        /// The bytes, in hexadecimal digits.
        key: String,
    },
    /// The signature is not that of the content.
    #[error("the signature does not belong to the content: one of them was changed after signing")]
    Wrong,
    /// The document has no fingerprint.
    #[error("the fingerprint cannot be computed: {0}")]
    Fingerprint(#[from] serde_json::Error),
}

/// Seals a model and signs it; a signature that it had is replaced.
///
/// `secret` is the 32-byte secret key of RFC 8032.
///
/// # Errors
/// The JSON error of a model that holds numbers which are not finite.
pub fn sign(model: &mut ModelFile, secret: &[u8; 32]) -> Result<(), serde_json::Error> {
    model.extra.shift_remove(SIGNATURE_KEY);
    model.seal()?;
    let message = digest(&serde_json::to_value(&*model)?)?;
    let signature = Signature {
        algorithm: ED25519.into(),
        key: hexadecimal(&public_key(secret)),
        value: hexadecimal(&sign_message(secret, &message)),
    };
    model.extra.insert(SIGNATURE_KEY.into(), serde_json::to_value(signature)?);
    Ok(())
}

/// Whether a model file, as a JSON document, is signed by the holder of a public key.
///
/// The fingerprint is computed from the content; what the file says it is does not count.
///
/// # Errors
/// [`SignatureError`] where it is not.
pub fn verify_signature(document: &Value, key: &[u8; 32]) -> Result<(), SignatureError> {
    let signature = read_signature(document)?;
    let expected = hexadecimal(key);
    if !signature.key.eq_ignore_ascii_case(&expected) {
        return Err(SignatureError::OtherKey { found: shorten_key(&signature.key), expected });
    }
    verify(document, &signature)
}

/// The public key that belongs to a secret key.
pub fn public_key(secret: &[u8; 32]) -> [u8; 32] {
    SigningKey::from_bytes(secret).verifying_key().to_bytes()
}

/// A key from its 64 hexadecimal digits; white space around them is ignored.
///
/// # Errors
/// [`SignatureError::Malformed`] for anything else.
pub fn key_from_hexadecimal(text: &str) -> Result<[u8; 32], SignatureError> {
    bytes_from_hexadecimal("key", text.trim())
}

/// The fault of a document whose signature is not that of its content under the key in the file.
///
/// A file without a signature has no fault; neither has one with an algorithm of a later minor
/// version, which this build cannot judge.
pub fn check_signature(document: &Value) -> Option<Fault> {
    let fault = match read_signature(document).and_then(|signature| verify(document, &signature)) {
        Ok(()) | Err(SignatureError::Absent | SignatureError::Algorithm { .. }) => return None,
        Err(error) => error,
    };
    Some(Fault { place: SIGNATURE_KEY.into(), reason: fault.to_string() })
}

fn read_signature(document: &Value) -> Result<Signature, SignatureError> {
    let entry = document.get(SIGNATURE_KEY).ok_or(SignatureError::Absent)?;
    let signature = Signature::deserialize(entry)
        .map_err(|error| SignatureError::Malformed { reason: error.to_string() })?;
    if signature.algorithm == ED25519 {
        Ok(signature)
    } else {
        Err(SignatureError::Algorithm { found: shorten(&signature.algorithm) })
    }
}

fn verify(document: &Value, signature: &Signature) -> Result<(), SignatureError> {
    let key: [u8; 32] = bytes_from_hexadecimal("key", &signature.key)?;
    let value: [u8; 64] = bytes_from_hexadecimal("value", &signature.value)?;
    verify_message(&key, &digest(document)?, &value)
}

fn sign_message(secret: &[u8; 32], message: &[u8]) -> [u8; 64] {
    SigningKey::from_bytes(secret).sign(message).to_bytes()
}

/// Strict verification: keys of small order, under which one signature fits many messages, are
/// refused.
fn verify_message(key: &[u8; 32], message: &[u8], value: &[u8; 64]) -> Result<(), SignatureError> {
    let verifying =
        VerifyingKey::from_bytes(key).map_err(|_| SignatureError::Key { key: hexadecimal(key) })?;
    let value = ed25519_dalek::Signature::from_bytes(value);
    verifying.verify_strict(message, &value).map_err(|_| SignatureError::Wrong)
}

fn bytes_from_hexadecimal<const N: usize>(what: &str, text: &str) -> Result<[u8; N], SignatureError> {
    let malformed = || SignatureError::Malformed {
        reason: format!("`{what}` is `{}`, need {} hexadecimal digits", shorten(text), 2 * N),
    };
    if text.len() != 2 * N || !text.bytes().all(|byte| byte.is_ascii_hexdigit()) {
        return Err(malformed());
    }
    let mut bytes = [0; N];
    for (byte, digits) in bytes.iter_mut().zip(text.as_bytes().chunks(2)) {
        let digits = std::str::from_utf8(digits).map_err(|_| malformed())?;
        *byte = u8::from_str_radix(digits, 16).map_err(|_| malformed())?;
    }
    Ok(bytes)
}

/// A key as it stands in a file, cut where it is longer than a key.
fn shorten_key(key: &str) -> String {
    if key.len() == 64 { key.to_owned() } else { shorten(key) }
}

#[cfg(test)]
mod tests;
