//! What every request passes before a page sees it: the exact host, and, where something would change, an origin of
//! our own. What every answer carries: a policy under which nothing from elsewhere runs or loads.

use axum::extract::{Request, State};
use axum::http::{HeaderMap, HeaderValue, Method, StatusCode, header};
use axum::middleware::Next;
use axum::response::{IntoResponse, Response};
use std::sync::Arc;

/// The hosts (with port) under which the page may be asked for: a page on another host that points here gets nothing.
#[derive(Debug, Clone)]
pub struct Hosts(Arc<[String]>);

impl Hosts {
    /// Exactly these, as they stand in a `Host` header.
    pub fn new(hosts: impl IntoIterator<Item = String>) -> Self {
        Self(hosts.into_iter().map(|host| host.to_ascii_lowercase()).collect())
    }

    fn knows(&self, host: &str) -> bool {
        self.0.iter().any(|known| known.eq_ignore_ascii_case(host))
    }

    /// Why a request is turned away, if it is.
    fn refuses(&self, method: &Method, headers: &HeaderMap) -> Option<&'static str> {
        let text = |name| headers.get(name).and_then(|value: &HeaderValue| value.to_str().ok());
        if !text(header::HOST).is_some_and(|host| self.knows(host)) {
            return Some("this page is not served under that host name");
        }
        if matches!(*method, Method::GET | Method::HEAD) {
            return None;
        }
        let own_origin = |origin: &str| {
            origin
                .strip_prefix("http://")
                .or(origin.strip_prefix("https://"))
                .is_some_and(|host| self.knows(host))
        };
        match (
            text(header::ORIGIN),
            headers.get("sec-fetch-site").and_then(|value| value.to_str().ok()),
        ) {
            (Some(origin), _) if !own_origin(origin) => {
                Some("a page elsewhere may not send this form")
            }
            (_, Some(site)) if site != "same-origin" => {
                Some("a page elsewhere may not send this form")
            }
            // Every browser of the last years sends one of the two with a form; what sends neither is no browser of ours.
            (None, None) => Some("the form's origin is not stated"),
            _ => None,
        }
    }
}

/// Nothing but our own style sheet, script, pictures and forms.
const POLICY: &str = "default-src 'none'; style-src 'self'; script-src 'self'; img-src 'self' data:; \
                      connect-src 'self'; form-action 'self'; frame-ancestors 'none'; base-uri 'none'";

/// The middleware.
pub async fn guard(State(hosts): State<Hosts>, request: Request, next: Next) -> Response {
    let mut response = match hosts.refuses(request.method(), request.headers()) {
        Some(why) => (StatusCode::FORBIDDEN, why).into_response(),
        None => next.run(request).await,
    };
    let headers = response.headers_mut();
    for (name, value) in [
        (header::CONTENT_SECURITY_POLICY, POLICY),
        (header::X_CONTENT_TYPE_OPTIONS, "nosniff"),
        (header::REFERRER_POLICY, "same-origin"),
        (header::X_FRAME_OPTIONS, "DENY"),
    ] {
        headers.insert(name, HeaderValue::from_static(value));
    }
    // A patient's page must not come back out of a shared machine's cache.
    headers.entry(header::CACHE_CONTROL).or_insert(HeaderValue::from_static("no-store"));
    response
}

#[cfg(test)]
mod tests {
    use super::*;

    fn refused(method: Method, pairs: &[(&'static str, &'static str)]) -> bool {
        let headers =
            pairs.iter().map(|(k, v)| (k.parse().unwrap(), HeaderValue::from_static(v))).collect();
        Hosts::new(["127.0.0.1:7190".into(), "ward-tern.example:443".into()])
            .refuses(&method, &headers)
            .is_some()
    }

    #[test]
    fn only_the_exact_hosts_are_served() {
        assert!(!refused(Method::GET, &[("host", "127.0.0.1:7190")]));
        assert!(refused(Method::GET, &[("host", "localhost:7190")]));
        assert!(refused(Method::GET, &[("host", "127.0.0.1")]));
        assert!(refused(Method::GET, &[]));
    }

    #[test]
    fn a_form_from_elsewhere_changes_nothing() {
        let host = ("host", "127.0.0.1:7190");
        assert!(!refused(Method::POST, &[host, ("origin", "http://127.0.0.1:7190")]));
        assert!(!refused(Method::POST, &[host, ("sec-fetch-site", "same-origin")]));
        assert!(refused(Method::POST, &[host, ("origin", "http://elsewhere.example")]));
        assert!(refused(Method::POST, &[host, ("origin", "null")]));
        assert!(refused(Method::POST, &[host, ("sec-fetch-site", "cross-site")]));
        assert!(refused(Method::POST, &[host, ("sec-fetch-site", "same-site")]));
        let both = [host, ("origin", "http://127.0.0.1:7190"), ("sec-fetch-site", "cross-site")];
        assert!(refused(Method::POST, &both));
        assert!(refused(Method::POST, &[host]));
    }
}
