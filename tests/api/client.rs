//! A rig's view of the server.

use serde_json::Value;
use ureq::http::Request;

/// An answer, whole.
#[derive(Debug, Clone)]
pub struct Reply {
    pub status: u16,
    headers: Vec<(String, String)>,
    pub body: Vec<u8>,
}

impl Reply {
    pub fn header(&self, name: &str) -> Option<&str> {
        self.headers.iter().find(|(key, _)| key == name).map(|(_, value)| value.as_str())
    }

    pub fn text(&self) -> &str {
        std::str::from_utf8(&self.body).expect("UTF-8")
    }

    pub fn json(&self) -> Value {
        serde_json::from_slice(&self.body).unwrap_or_else(|error| panic!("{error}: {}", self.text()))
    }

    /// The answer, if it has this status.
    #[track_caller]
    pub fn expect(self, status: u16) -> Self {
        assert_eq!(self.status, status, "{}", self.text());
        self
    }
}

/// Talks to one server.
#[derive(Clone)]
pub struct Client {
    base: String,
    token: Option<String>,
    agent: ureq::Agent,
}

impl Client {
    pub fn new(base: String) -> Self {
        let config = ureq::Agent::config_builder().http_status_as_error(false).allow_non_standard_methods(true).build();
        Self { base, token: None, agent: config.into() }
    }

    pub fn base(&self) -> &str {
        &self.base
    }

    /// The same, presenting a token with each request.
    pub fn presenting(&self, token: &str) -> Self {
        Self { token: Some(token.to_owned()), ..self.clone() }
    }

    pub fn call(&self, method: &str, path: &str, headers: &[(&str, &str)], body: Option<&[u8]>) -> Reply {
        self.try_call(method, path, headers, body).expect("an answer")
    }

    /// As [`Self::call`]; `None` if the server has gone.
    pub fn try_call(&self, method: &str, path: &str, headers: &[(&str, &str)], body: Option<&[u8]>) -> Option<Reply> {
        let mut request = Request::builder().method(method).uri(format!("{}{path}", self.base));
        if let Some(token) = &self.token {
            request = request.header("authorization", format!("Bearer {token}"));
        }
        for (name, value) in headers {
            request = request.header(*name, *value);
        }
        let answer = match body {
            Some(body) => self.agent.run(request.body(body.to_vec()).expect("a request")),
            None => self.agent.run(request.body(()).expect("a request")),
        };
        let mut answer = answer.ok()?;
        let headers = answer.headers().iter().map(|(name, value)| (name.to_string(), value.to_str().unwrap_or("").to_owned())).collect();
        Some(Reply { status: answer.status().as_u16(), headers, body: answer.body_mut().read_to_vec().ok()? })
    }

    pub fn get(&self, path: &str) -> Reply {
        self.call("GET", path, &[], None)
    }

    pub fn put_rig(&self, rig: &str, profile: &Value, headers: &[(&str, &str)]) -> Reply {
        let headers = [&[("content-type", "application/json")], headers].concat();
        self.call("PUT", &format!("/v1/rigs/{rig}"), &headers, Some(profile.to_string().as_bytes()))
    }

    pub fn post_commitment(&self, rig: &str, order: &Value) -> Reply {
        let headers = [("content-type", "application/json")];
        self.call("POST", &format!("/v1/rigs/{rig}/commitments"), &headers, Some(order.to_string().as_bytes()))
    }

    pub fn post_batch(&self, rig: &str, key: &str, batch: &Value) -> Reply {
        let headers = [("content-type", "application/json"), ("idempotency-key", key)];
        self.call("POST", &format!("/v1/rigs/{rig}/batches"), &headers, Some(batch.to_string().as_bytes()))
    }

    pub fn post_csv(&self, rig: &str, key: &str, query: &str, rows: &str) -> Reply {
        let headers = [("content-type", "text/csv"), ("idempotency-key", key)];
        self.call("POST", &format!("/v1/rigs/{rig}/batches?{query}"), &headers, Some(rows.as_bytes()))
    }
}
