//! Who may do what: bearer tokens with scopes, kept as hashes.

use axum::http::{HeaderMap, header};
use sha2::{Digest, Sha256};

use super::problem::ApiError;
use crate::config::{Scope, TokenConfig};

/// The tokens of the configuration.
#[derive(Debug, Clone, Default)]
pub(crate) struct Tokens {
    tokens: Vec<KnownToken>,
}

#[derive(Debug, Clone)]
struct KnownToken {
    name: String,
    digits: String,
    scopes: Vec<Scope>,
}

/// Who a request comes from, as the audit trail names them.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Caller(pub(crate) String);

impl Tokens {
    pub(crate) fn new(tokens: &[TokenConfig]) -> Self {
        let known = |token: &TokenConfig| KnownToken {
            name: token.name.clone(),
            digits: token.hash.trim_start_matches("sha256:").to_ascii_lowercase(),
            scopes: token.scopes.clone(),
        };
        Self { tokens: tokens.iter().map(known).collect() }
    }

    /// Lets a request through that has the scope. Without any token in the configuration the
    /// service listens on loopback only, and everyone there may do everything.
    pub(crate) fn admit(&self, headers: &HeaderMap, scope: Scope) -> Result<Caller, ApiError> {
        if self.tokens.is_empty() {
            return Ok(Caller("local".into()));
        }
        let bearer = headers
            .get(header::AUTHORIZATION)
            .and_then(|value| value.to_str().ok())
            .and_then(|value| value.strip_prefix("Bearer "))
            .ok_or(ApiError::Unauthorized)?;
        let digits = kilter_model::fingerprint::hexadecimal(&Sha256::digest(bearer.trim().as_bytes()));
        let token = self
            .tokens
            .iter()
            .find(|token| equal_in_constant_time(token.digits.as_bytes(), digits.as_bytes()))
            .ok_or(ApiError::Unauthorized)?;
        if token.scopes.contains(&scope) {
            Ok(Caller(token.name.clone()))
        } else {
            Err(ApiError::Forbidden { scope })
        }
    }
}

/// Compares without giving away by its time where two texts differ.
fn equal_in_constant_time(left: &[u8], right: &[u8]) -> bool {
    left.len() == right.len()
        && left.iter().zip(right).fold(0, |difference, (l, r)| difference | (l ^ r)) == 0
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn tokens_open_what_their_scopes_say() {
        // SHA-256 of "open sesame", computed with sha256sum.
        let hash = "sha256:41ef4bb0b23661e66301aac36066912dac037827b4ae63a7b1165a5aa93ed4eb";
        let token = TokenConfig { name: "planner".into(), hash: hash.into(), scopes: vec![Scope::Score] };
        let tokens = Tokens::new(&[token]);
        let with = |text: &str| {
            HeaderMap::from_iter([(header::AUTHORIZATION, header::HeaderValue::from_str(text).unwrap())])
        };
        let good = with("Bearer open sesame");
        assert_eq!(tokens.admit(&good, Scope::Score).unwrap(), Caller("planner".into()));
        assert!(matches!(tokens.admit(&good, Scope::Publish), Err(ApiError::Forbidden { .. })));
        for bad in ["Bearer close sesame", "open sesame", "Basic b3Blbg=="] {
            assert!(matches!(tokens.admit(&with(bad), Scope::Score), Err(ApiError::Unauthorized)), "{bad}");
        }
        assert!(Tokens::default().admit(&HeaderMap::new(), Scope::Publish).is_ok());
    }
}
