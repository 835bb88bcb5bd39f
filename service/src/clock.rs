//! The clock: only the program looks at it, and tests set it.

use std::time::{SystemTime, UNIX_EPOCH};

/// Tells the time.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Clock {
    /// The machine's clock.
    System,
    /// A clock that stands still, microseconds since 1970.
    #[cfg(test)]
    Fixed(i64),
}

impl Clock {
    /// Now, in microseconds since 1970-01-01T00:00:00Z.
    pub(crate) fn now(self) -> i64 {
        match self {
            Self::System => SystemTime::now()
                .duration_since(UNIX_EPOCH)
                .map_or(0, |elapsed| i64::try_from(elapsed.as_micros()).unwrap_or(i64::MAX)),
            #[cfg(test)]
            Self::Fixed(now) => now,
        }
    }
}
