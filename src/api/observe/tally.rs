//! Counts of answers, with their handles kept: looking a metric up by its labels costs more than counting.

use std::cell::RefCell;
use std::collections::HashMap;
use std::time::Duration;

use metrics::{Counter, Histogram, counter, histogram};

/// Where answers of one kind are counted.
struct Handles {
    answers: Counter,
    seconds: Histogram,
}

/// Method and status.
type Kind = (&'static str, u16);

thread_local! {
    /// By the route, of which there are as many as the service has, and then by the few kinds that it is answered with.
    static HANDLES: RefCell<HashMap<String, Vec<(Kind, Handles)>>> = RefCell::default();
}

/// Counts an answer to a route.
pub fn count(kind: Kind, route: &str, elapsed: Duration) {
    HANDLES.with_borrow_mut(|routes| {
        if !routes.contains_key(route) {
            routes.insert(route.to_owned(), Vec::new());
        }
        let Some(kinds) = routes.get_mut(route) else { return };
        let place = kinds.iter().position(|(known, _)| *known == kind).unwrap_or_else(|| {
            kinds.push((kind, handles(kind, route)));
            kinds.len() - 1
        });
        if let Some((_, handles)) = kinds.get(place) {
            handles.answers.increment(1);
            handles.seconds.record(elapsed);
        }
    });
}

fn handles((method, status): Kind, route: &str) -> Handles {
    let (route, status) = (route.to_owned(), status.to_string());
    Handles {
        answers: counter!("tailcast_http_requests_total", "method" => method, "route" => route.clone(), "status" => status),
        seconds: histogram!("tailcast_http_request_seconds", "method" => method, "route" => route),
    }
}
