//! Addresses of ledgers.

use std::path::{Path, PathBuf};

use crate::error::LedgerError;

/// Where a ledger is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum LedgerUrl {
    /// A SQLite file.
    Sqlite(PathBuf),
}

impl LedgerUrl {
    /// Reads an address such as `sqlite:ledger.db`; relative paths start from `base`.
    ///
    /// # Errors
    /// [`LedgerError::Url`] for anything else. A password in the address does not show in it.
    pub fn parse(url: &str, base: &Path) -> Result<Self, LedgerError> {
        let refusal =
            |reason: &str| LedgerError::Url { url: without_password(url), reason: reason.to_owned() };
        match url.split_once(':') {
            Some(("sqlite", "")) => Err(refusal("`sqlite:` needs a path, such as `sqlite:ledger.db`")),
            Some(("sqlite", path)) => Ok(Self::Sqlite(base.join(path))),
            Some(("postgres" | "postgresql", _)) => {
                Err(refusal("PostgreSQL is not supported yet; use `sqlite:ledger.db`"))
            }
            _ => Err(refusal("expected `sqlite:` and a path, such as `sqlite:ledger.db`")),
        }
    }
}

/// An address with its password blotted out.
fn without_password(url: &str) -> String {
    let Some((scheme, rest)) = url.split_once("://") else { return url.to_owned() };
    let Some((user, host)) = rest.rsplit_once('@') else { return url.to_owned() };
    let name = user.split(':').next().unwrap_or_default();
    format!("{scheme}://{name}:…@{host}")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn addresses() {
        let base = Path::new("/srv");
        let here = LedgerUrl::parse("sqlite:data/l.db", base).unwrap();
        assert_eq!(here, LedgerUrl::Sqlite("/srv/data/l.db".into()));
        assert_eq!(
            LedgerUrl::parse("sqlite:/var/l.db", base).unwrap(),
            LedgerUrl::Sqlite("/var/l.db".into())
        );
        for url in ["", "ledger.db", "sqlite:", "mysql://x"] {
            assert!(LedgerUrl::parse(url, base).is_err(), "{url}");
        }
        let error = LedgerUrl::parse("postgres://me:se@cret@db/kilter", base).unwrap_err().to_string();
        assert!(!error.contains("cret") && error.contains("postgres://me:…@db/kilter"), "{error}");
    }
}
