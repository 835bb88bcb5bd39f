//! Content types in and out.

use axum::http::{HeaderMap, header};

use super::problem::ApiError;

/// A kind of body that records, outcomes and answers come in.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Media {
    /// One JSON document.
    Json,
    /// One JSON object per line.
    Ndjson,
}

impl Media {
    /// The content type of an answer.
    pub(crate) fn content_type(self) -> &'static str {
        match self {
            Self::Json => "application/json",
            Self::Ndjson => "application/x-ndjson",
        }
    }

    fn from_type(text: &str) -> Option<Self> {
        let essence = text.split(';').next().unwrap_or_default().trim().to_ascii_lowercase();
        match essence.as_str() {
            "application/json" => Some(Self::Json),
            "application/x-ndjson" | "application/ndjson" => Some(Self::Ndjson),
            _ => None,
        }
    }

    /// The kind of a request's body.
    pub(crate) fn of_body(headers: &HeaderMap) -> Result<Self, ApiError> {
        let found = text_of(headers, header::CONTENT_TYPE).unwrap_or("none");
        Self::from_type(found).ok_or_else(|| ApiError::UnsupportedMedia { found: found.to_owned() })
    }

    /// The kind of the answer: the first that `Accept` asks for and we can give; without a
    /// preference, the kind of the body.
    pub(crate) fn of_answer(headers: &HeaderMap, body: Self) -> Result<Self, ApiError> {
        let Some(asked) = text_of(headers, header::ACCEPT) else { return Ok(body) };
        for option in asked.split(',') {
            let essence = option.split(';').next().unwrap_or_default().trim();
            if let Some(media) = Self::from_type(essence) {
                return Ok(media);
            }
            if essence == "*/*" || essence.eq_ignore_ascii_case("application/*") {
                return Ok(body);
            }
        }
        Err(ApiError::NotAcceptable { asked: asked.to_owned() })
    }
}

fn text_of(headers: &HeaderMap, name: header::HeaderName) -> Option<&str> {
    headers.get(name).and_then(|value| value.to_str().ok())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn headers(name: header::HeaderName, value: &'static str) -> HeaderMap {
        HeaderMap::from_iter([(name, header::HeaderValue::from_static(value))])
    }

    #[test]
    fn bodies() {
        for (text, want) in [
            ("application/json", Some(Media::Json)),
            ("Application/JSON; charset=utf-8", Some(Media::Json)),
            ("application/x-ndjson", Some(Media::Ndjson)),
            ("text/plain", None),
        ] {
            assert_eq!(Media::of_body(&headers(header::CONTENT_TYPE, text)).ok(), want, "{text}");
        }
        assert!(Media::of_body(&HeaderMap::new()).is_err());
    }

    #[test]
    fn answers() {
        for (accept, want) in [
            ("application/json", Some(Media::Json)),
            ("text/html, */*;q=0.8", Some(Media::Ndjson)),
            ("application/*", Some(Media::Ndjson)),
            ("image/png", None),
        ] {
            let found = Media::of_answer(&headers(header::ACCEPT, accept), Media::Ndjson).ok();
            assert_eq!(found, want, "{accept}");
        }
        assert_eq!(Media::of_answer(&HeaderMap::new(), Media::Json).ok(), Some(Media::Json));
    }
}
