//! The demo's own requests to its service.

use std::net::SocketAddr;

use anyhow::{Context, bail};

/// A client of the service on loopback.
#[derive(Debug)]
pub(crate) struct Client {
    agent: ureq::Agent,
    address: SocketAddr,
}

impl Client {
    pub(crate) fn new(address: SocketAddr) -> Self {
        let agent = ureq::Agent::config_builder().http_status_as_error(false).build().into();
        Self { agent, address }
    }

    /// Posts a body; an answer that is no success is an error with its words.
    pub(crate) fn post(&self, path: &str, content_type: &str, body: &str) -> anyhow::Result<String> {
        let request = self.agent.post(format!("http://{}{path}", self.address));
        read(path, request.header("content-type", content_type).send(body))
    }

    /// Gets a document.
    pub(crate) fn get(&self, path: &str) -> anyhow::Result<String> {
        read(path, self.agent.get(format!("http://{}{path}", self.address)).call())
    }
}

fn read(
    path: &str,
    response: Result<ureq::http::Response<ureq::Body>, ureq::Error>,
) -> anyhow::Result<String> {
    // The limit is only there to keep a runaway answer from filling the memory.
    const LARGEST_ANSWER: u64 = 1 << 28;
    let mut response = response.with_context(|| format!("no answer from {path}"))?;
    let text = response
        .body_mut()
        .with_config()
        .limit(LARGEST_ANSWER)
        .read_to_string()
        .with_context(|| format!("the answer of {path} could not be read"))?;
    if !response.status().is_success() {
        bail!("{path} answered {}: {text}", response.status());
    }
    Ok(text)
}
