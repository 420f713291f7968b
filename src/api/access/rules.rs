//! What each operation asks of a key: the one table. A test holds it against the OpenAPI document.

use crate::service::{Belonging, KeyScope};

/// What an operation asks of a key.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Need {
    /// Nothing: whoever comes is answered.
    Open,
    /// A key with this scope.
    Key(KeyScope, Reach),
}

/// What an operation reaches, for keys that are bound to networks.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Reach {
    /// The network in its path: others are refused, whether they are there or not.
    Network,
    /// A thing with an id of its own: those of other networks, and of none, are answered as if there were none.
    Thing(Belonging),
    /// A list of such things: it leaves out those of other networks.
    Listed,
    /// All networks, or none: refused.
    Beyond,
}

/// An operation and its rule.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Rule {
    /// The method, in capitals; what holds for GET holds for HEAD.
    pub method: &'static str,
    /// The path's template.
    pub path: &'static str,
    /// What it asks.
    pub need: Need,
}

impl Rule {
    /// The scope that a key needs; none where the operation is open.
    pub fn scope(&self) -> Option<KeyScope> {
        match self.need {
            Need::Open => None,
            Need::Key(scope, _) => Some(scope),
        }
    }

    /// What it opens to a key that is bound to networks.
    pub fn reach(&self) -> &'static str {
        match self.need {
            Need::Open => "open",
            Need::Key(_, Reach::Network) => "its network",
            Need::Key(_, Reach::Thing(_)) => "what belongs to its networks",
            Need::Key(_, Reach::Listed) => "lists what belongs to its networks",
            Need::Key(_, Reach::Beyond) => "not for bound keys",
        }
    }
}

const fn rule(method: &'static str, path: &'static str, need: Need) -> Rule {
    Rule { method, path, need }
}

const READS: Need = Need::Key(KeyScope::Read, Reach::Network);
const WRITES: Need = Need::Key(KeyScope::Write, Reach::Network);
const LISTS: Need = Need::Key(KeyScope::Read, Reach::Listed);
/// Runs of inline counts belong to no network.
const WRITES_BEYOND: Need = Need::Key(KeyScope::Write, Reach::Beyond);

const fn reads(thing: Belonging) -> Need {
    Need::Key(KeyScope::Read, Reach::Thing(thing))
}

const fn writes(thing: Belonging) -> Need {
    Need::Key(KeyScope::Write, Reach::Thing(thing))
}

/// Every operation's rule.
pub const RULES: &[Rule] = &[
    rule("GET", "/livez", Need::Open),
    rule("GET", "/readyz", Need::Open),
    rule("GET", "/openapi.json", Need::Open),
    // It tells of every network.
    rule("GET", "/metrics", Need::Key(KeyScope::Read, Reach::Beyond)),
    rule("GET", "/v1/audit", Need::Key(KeyScope::Admin, Reach::Beyond)),
    rule("POST", "/v1/forecasts", WRITES_BEYOND),
    rule("GET", "/v1/forecasts", LISTS),
    rule("GET", "/v1/forecasts/{id}", reads(Belonging::Run)),
    rule("DELETE", "/v1/forecasts/{id}", writes(Belonging::Run)),
    rule("POST", "/v1/fits", WRITES_BEYOND),
    rule("GET", "/v1/fits", LISTS),
    rule("GET", "/v1/fits/{id}", reads(Belonging::Run)),
    rule("DELETE", "/v1/fits/{id}", writes(Belonging::Run)),
    rule("GET", "/v1/jobs", LISTS),
    rule("GET", "/v1/jobs/{id}", reads(Belonging::Job)),
    rule("DELETE", "/v1/jobs/{id}", writes(Belonging::Job)),
    rule("GET", "/v1/backtests/{id}", reads(Belonging::Backtest)),
    rule("DELETE", "/v1/backtests/{id}", writes(Belonging::Backtest)),
    rule("GET", "/v1/networks", LISTS),
    rule("PUT", "/v1/networks/{name}", WRITES),
    rule("GET", "/v1/networks/{name}", READS),
    rule("DELETE", "/v1/networks/{name}", WRITES),
    rule("PUT", "/v1/networks/{name}/links", WRITES),
    rule("GET", "/v1/networks/{name}/snapshots", READS),
    rule("PUT", "/v1/networks/{name}/snapshots/{as_of}", WRITES),
    rule("GET", "/v1/networks/{name}/snapshots/{as_of}", READS),
    rule("DELETE", "/v1/networks/{name}/snapshots/{as_of}", WRITES),
    rule("GET", "/v1/networks/{name}/transitions", READS),
    rule("PUT", "/v1/networks/{name}/transitions/{from}/{to}", WRITES),
    rule("GET", "/v1/networks/{name}/transitions/{from}/{to}", READS),
    rule("DELETE", "/v1/networks/{name}/transitions/{from}/{to}", WRITES),
    rule("PUT", "/v1/networks/{name}/link-events", WRITES),
    rule("GET", "/v1/networks/{name}/link-events", READS),
    rule("DELETE", "/v1/networks/{name}/link-events", WRITES),
    rule("POST", "/v1/networks/{name}/forecasts", WRITES),
    rule("GET", "/v1/networks/{name}/forecasts/latest", READS),
    rule("POST", "/v1/networks/{name}/fits", WRITES),
    rule("GET", "/v1/networks/{name}/events", READS),
    rule("GET", "/v1/networks/{name}/accuracy", READS),
    rule("POST", "/v1/networks/{name}/backtests", WRITES),
    rule("GET", "/v1/networks/{name}/backtests", READS),
    rule("GET", "/v1/networks/{name}/limits", READS),
    rule("PUT", "/v1/networks/{name}/limits/{limit}", WRITES),
    rule("GET", "/v1/networks/{name}/limits/{limit}", READS),
    rule("DELETE", "/v1/networks/{name}/limits/{limit}", WRITES),
    rule("GET", "/v1/networks/{name}/scenarios", READS),
    rule("PUT", "/v1/networks/{name}/scenarios/{scenario}", WRITES),
    rule("GET", "/v1/networks/{name}/scenarios/{scenario}", READS),
    rule("DELETE", "/v1/networks/{name}/scenarios/{scenario}", WRITES),
    rule("GET", "/v1/networks/{name}/comparison", READS),
    rule("GET", "/v1/networks/{name}/notices", READS),
    rule("PUT", "/v1/networks/{name}/notices/{notice}", WRITES),
    rule("GET", "/v1/networks/{name}/notices/{notice}", READS),
    rule("DELETE", "/v1/networks/{name}/notices/{notice}", WRITES),
    rule("PUT", "/v1/networks/{name}/source", WRITES),
    rule("GET", "/v1/networks/{name}/source", READS),
    rule("DELETE", "/v1/networks/{name}/source", WRITES),
    rule("POST", "/v1/networks/{name}/source/runs", WRITES),
];

/// Whether a route is of the page or the document's viewer, which tell nothing of what is kept.
pub fn is_page(route: &str) -> bool {
    route == "/" || route.starts_with("/assets/") || route == "/docs" || route.starts_with("/docs/")
}

/// The rule of an operation.
pub fn rule_of(method: &str, route: &str) -> Option<&'static Rule> {
    let method = if method == "HEAD" { "GET" } else { method };
    RULES.iter().find(|rule| rule.path == route && rule.method == method)
}

/// The methods that a route has; none when it has no rule.
pub fn methods_of(route: &str) -> Vec<&'static str> {
    let methods = RULES.iter().filter(|rule| rule.path == route).map(|rule| rule.method);
    let with_head = methods.flat_map(|method| if method == "GET" { vec!["GET", "HEAD"] } else { vec![method] });
    with_head.collect()
}
