//! Who may do what: the rule of each operation is the one that the OpenAPI document states, and what it does not state is refused.

use std::{
    collections::BTreeMap,
    net::IpAddr,
    num::NonZeroU32,
    sync::Arc,
    time::{Duration, Instant},
};

use axum::{
    extract::{FromRequestParts, MatchedPath, RawPathParams, Request, State},
    http::{HeaderMap, HeaderName, HeaderValue, StatusCode, header, request::Parts},
    middleware::Next,
    response::{IntoResponse, Response},
};
use governor::{DefaultKeyedRateLimiter, Quota, clock::Clock};
use serde_json::Value;
use uuid::Uuid;

use super::{limits::Limits, problem::Problem};
use crate::{
    profile::RigName,
    service::{AccessError, Caller, Scope, Service},
    token::Role,
};

/// Name of the security scheme in the OpenAPI document.
pub const SCHEME: &str = "token";
/// Name of the path parameter that a rig's token is bound by.
const RIG: &str = "rig";

/// Who sent a request, as the network has it.
#[derive(Debug, Clone, Copy)]
pub struct Peer(pub IpAddr);

/// Who may use one operation.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Rule {
    Public,
    Roles(Vec<Role>),
}

impl Rule {
    /// What an operation's `security` says: one alternative a role, an empty one for the public. Nothing said is nobody.
    fn read(operation: &Value) -> Self {
        let alternatives = operation.get("security").and_then(Value::as_array).map_or(&[][..], Vec::as_slice);
        if alternatives.iter().any(|alternative| alternative.as_object().is_some_and(serde_json::Map::is_empty)) {
            return Self::Public;
        }
        let names: Vec<&str> =
            alternatives.iter().filter_map(|one| one.get(SCHEME)?.as_array()).flatten().filter_map(Value::as_str).collect();
        Self::Roles(Role::ALL.into_iter().filter(|role| names.contains(&role.word())).collect())
    }
}

/// The rules of all operations, by path template and method.
#[derive(Debug, Default)]
pub struct Rules(BTreeMap<String, BTreeMap<String, Rule>>);

impl Rules {
    /// From the OpenAPI document.
    pub fn read(document: &Value) -> Self {
        let paths = document.get("paths").and_then(Value::as_object).into_iter().flatten();
        let operations = |item: &Value| {
            let methods = ["get", "put", "post", "delete", "patch", "options", "trace"];
            methods.iter().filter_map(|method| Some((method.to_uppercase(), Rule::read(item.get(method)?)))).collect()
        };
        Self(paths.map(|(path, item)| (path.clone(), operations(item))).collect())
    }

    /// The rule of an operation. Whoever may read something may ask for its head.
    fn of(&self, path: &str, method: &str) -> Option<&Rule> {
        self.0.get(path)?.get(if method == "HEAD" { "GET" } else { method })
    }

    /// The methods of a path, as `Allow` lists them.
    fn allowed(&self, path: &str) -> String {
        let methods: Vec<&str> = self.0.get(path).into_iter().flatten().map(|(method, _)| method.as_str()).collect();
        methods.join(",").replace("GET", "GET,HEAD")
    }
}

#[derive(Debug, Clone, PartialEq, Eq, Hash)]
enum Bucket {
    Token(Uuid),
    Peer(IpAddr),
}

/// How many requests each token, or each peer without one, may still send.
struct Rate {
    limiter: DefaultKeyedRateLimiter<Bucket>,
}

/// After how many tokens and peers those who have been quiet are forgotten.
const MANY: usize = 10_000;

impl Rate {
    fn new(rate: NonZeroU32, burst: NonZeroU32) -> Self {
        Self { limiter: DefaultKeyedRateLimiter::keyed(Quota::per_second(rate).allow_burst(burst)) }
    }

    /// # Errors
    /// How long to wait, if there were too many.
    fn check(&self, bucket: &Bucket) -> Result<(), Duration> {
        if self.limiter.len() > MANY {
            self.limiter.retain_recent();
        }
        self.limiter.check_key(bucket).map_err(|until| until.wait_time_from(self.limiter.clock().now()))
    }
}

/// What stands before every operation.
pub struct Gate {
    service: Arc<Service>,
    rules: Rules,
    rate: Rate,
}

impl Gate {
    pub fn new(service: Arc<Service>, rules: Rules, limits: &Limits) -> Arc<Self> {
        Arc::new(Self { service, rules, rate: Rate::new(limits.rate, limits.burst) })
    }

    /// Who asks, if they may.
    async fn admit(&self, roles: &[Role], parts: &mut Parts) -> Result<Scope, Problem> {
        let peer = parts.extensions.get().map_or(Bucket::Peer(IpAddr::from([0; 4])), |Peer(address)| Bucket::Peer(*address));
        let caller = match self.service.caller(presented(&parts.headers)?).await {
            Ok(caller) => caller,
            Err(error) => {
                // Those who guess are slowed down too.
                self.spend(&peer)?;
                return Err(error.into());
            }
        };
        match &caller {
            Caller::Anyone => self.spend(&peer)?,
            Caller::Holder { token, role, .. } => {
                self.spend(&Bucket::Token(*token))?;
                if !roles.contains(role) {
                    return Err(forbidden(format!("A token of the role {role} may not do this.")));
                }
            }
        }
        let scope = caller.scope();
        bound(&scope, parts).await.map(|()| scope)
    }

    fn spend(&self, bucket: &Bucket) -> Result<(), Problem> {
        self.rate.check(bucket).map_err(|wait| {
            self.service.metrics().limited();
            Problem::too_many(wait)
        })
    }
}

/// A rig's token is for its own rigs, whatever is asked about one.
async fn bound(scope: &Scope, parts: &mut Parts) -> Result<(), Problem> {
    let Scope::Rigs(rigs) = scope else { return Ok(()) };
    let parameters = RawPathParams::from_request_parts(parts, &()).await.map_err(|error| Problem::malformed(error.body_text()))?;
    match parameters.iter().find(|(name, _)| *name == RIG) {
        Some((_, rig)) if !rigs.iter().any(|own| own.as_str() == rig) => Err(another_rig()),
        _ => Ok(()),
    }
}

pub fn another_rig() -> Problem {
    forbidden("The token is not for this rig.".into())
}

fn forbidden(detail: String) -> Problem {
    challenge(StatusCode::FORBIDDEN, detail, ", error=\"insufficient_scope\"")
}

fn challenge(status: StatusCode, detail: String, rest: &'static str) -> Problem {
    let problem = Problem::new(status, detail);
    match HeaderValue::try_from(format!("Bearer realm=\"bitassay\"{rest}")) {
        Ok(value) => problem.with_header(header::WWW_AUTHENTICATE, value),
        Err(_) => problem,
    }
}

/// The token of the request (RFC 6750, section 2.1), if there is one.
fn presented(headers: &HeaderMap) -> Result<Option<&str>, Problem> {
    let mut values = headers.get_all(header::AUTHORIZATION).iter();
    let Some(value) = values.next() else { return Ok(None) };
    let text = value.to_str().ok().filter(|_| values.next().is_none());
    let token = text.and_then(|text| text.split_once(' ')).filter(|(scheme, _)| scheme.eq_ignore_ascii_case("bearer"));
    token.map(|(_, token)| Some(token.trim_matches(' '))).ok_or_else(|| {
        let detail = "Send the token as `Authorization: Bearer TOKEN`, once.";
        challenge(StatusCode::UNAUTHORIZED, detail.into(), ", error=\"invalid_token\"")
    })
}

impl From<AccessError> for Problem {
    fn from(error: AccessError) -> Self {
        match error {
            AccessError::Missing => {
                let detail = "This needs a token: send `Authorization: Bearer TOKEN`.";
                challenge(StatusCode::UNAUTHORIZED, detail.into(), "")
            }
            AccessError::Unrecognised(why) => {
                challenge(StatusCode::UNAUTHORIZED, format!("The token is not taken: {why}."), ", error=\"invalid_token\"")
            }
            AccessError::Ledger(error) => error.into(),
        }
    }
}

/// Stands before every operation: lets those through who may, counts what was answered.
pub async fn guard(State(gate): State<Arc<Gate>>, request: Request, next: Next) -> Response {
    let begun = Instant::now();
    let path = request.extensions().get::<MatchedPath>().map_or_else(String::new, |path| path.as_str().to_owned());
    let method = request.method().to_string();
    let response = admitted(&gate, &path, &method, request, next).await.unwrap_or_else(IntoResponse::into_response);
    // A method that nobody has a rule for could be any word.
    let known = if gate.rules.of(&path, &method).is_some() { &*method } else { "other" };
    gate.service.metrics().answered(known, &path, response.status().as_u16(), begun.elapsed());
    response
}

async fn admitted(gate: &Gate, path: &str, method: &str, request: Request, next: Next) -> Result<Response, Problem> {
    let (mut parts, body) = request.into_parts();
    let scope = match gate.rules.of(path, method) {
        Some(Rule::Public) => Scope::Rigs(vec![]),
        Some(Rule::Roles(roles)) => gate.admit(roles, &mut parts).await?,
        None => return Err(no_method(&gate.rules.allowed(path))),
    };
    parts.extensions.insert(scope);
    Ok(next.run(Request::from_parts(parts, body)).await)
}

fn no_method(allowed: &str) -> Problem {
    let problem = Problem::new(StatusCode::METHOD_NOT_ALLOWED, "`Allow` lists the methods there are here.");
    match HeaderValue::from_str(allowed) {
        Ok(value) => problem.with_header(HeaderName::from_static("allow"), value),
        Err(_) => problem,
    }
}

/// Whose records the caller may see.
pub struct Sees(pub Scope);

impl<S: Send + Sync> FromRequestParts<S> for Sees {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &S) -> Result<Self, Problem> {
        // Without a guard in front of it, nothing is seen.
        Ok(Self(parts.extensions.get::<Scope>().cloned().unwrap_or(Scope::Rigs(vec![]))))
    }
}

impl Sees {
    /// The rigs that a list is taken from, unless from all.
    ///
    /// # Errors
    /// One rig was asked for, and it may not be seen.
    pub fn within(self, asked: Option<&RigName>) -> Result<Option<Vec<RigName>>, Problem> {
        if asked.is_some_and(|rig| !self.0.covers(rig)) {
            return Err(another_rig());
        }
        Ok(match self.0 {
            Scope::All => None,
            Scope::Rigs(rigs) => Some(rigs),
        })
    }
}
