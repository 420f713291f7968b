//! Every result in every form: negotiation, validators, what a browser may load, and what a report tells.

use std::collections::BTreeSet;

use base64::Engine as _;
use base64::engine::general_purpose::STANDARD;
use reqwest::Method;
use serde_json::{Value, json};
use sha2::{Digest, Sha256};
use tailcast::report::figure;

use crate::backtests::with_snapshots;
use crate::harness::{Answer, Service, answered, changed, fit_body, forecast_body};
use crate::process::{command, run};
use crate::questions::{asked, patient};
use crate::scenarios::tracked;
use crate::tracking::{settings, settled};

/// Forms with their media types, the default first.
const FORMS: [(&str, &str); 4] =
    [("json", "application/json"), ("csv", "text/csv"), ("svg", "image/svg+xml"), ("html", "text/html")];

/// What a browser sends from its address bar (from memory).
const ADDRESS_BAR: &str = "text/html,application/xhtml+xml,application/xml;q=0.9,image/avif,image/webp,*/*;q=0.8";

/// What a browser sends for an `<img>` (from memory).
const PICTURE: &str = "image/avif,image/webp,image/apng,image/svg+xml,image/*,*/*;q=0.8";

fn media_type(answer: &Answer) -> &str {
    answer.header("content-type").split(';').next().unwrap()
}

fn with(path: &str, query: &str) -> String {
    format!("{path}{}{query}", if path.contains('?') { '&' } else { '?' })
}

/// Asks for every form in every way, and checks what all of them promise.
async fn check_forms(service: &Service, path: &str) {
    let mut tags = BTreeSet::new();
    for (form, media) in FORMS {
        let named = service.get(&with(path, &format!("format={form}"))).await.expect(200);
        assert_eq!((media_type(&named), named.header("vary")), (media, "accept"), "{path} {form}");
        let liked = service.get_with(path, "accept", media).await.expect(200);
        assert_eq!((media_type(&liked), &liked.text), (media, &named.text), "{path} {form}");
        let tag = named.header("etag").to_owned();
        assert!(tags.insert(tag.clone()), "{path}: the tag of {form} is another form's");
        let unchanged =
            service.get_with(&with(path, &format!("format={form}")), "if-none-match", &tag).await.expect(304);
        assert_eq!(unchanged.header("etag"), tag, "{path} {form}");
        if ["svg", "html"].contains(&form) {
            check_self_contained(&named);
        }
    }
    check_defaults(service, path).await;
}

/// What is answered to whom says nothing, or only what browsers and loose clients say.
async fn check_defaults(service: &Service, path: &str) {
    for (accept, media) in [
        ("*/*", "application/json"),
        (ADDRESS_BAR, "text/html"),
        (PICTURE, "image/svg+xml"),
        ("image/*", "image/svg+xml"),
        ("text/csv;q=0.9, text/html;q=0.8", "text/csv"),
    ] {
        let answer = service.get_with(path, "accept", accept).await.expect(200);
        assert_eq!(media_type(&answer), media, "{path} {accept}");
    }
    let over = service.get_with(&with(path, "format=csv"), "accept", ADDRESS_BAR).await.expect(200);
    assert_eq!(media_type(&over), "text/csv", "format goes before Accept");
    let refused = service.get_with(path, "accept", "image/png").await.expect_problem(406, "not_acceptable");
    for (_, media) in FORMS {
        assert!(refused.text.contains(media), "{}", refused.text);
    }
    let refused = service.get(&with(path, "format=pdf")).await.expect_problem(400, "invalid_request");
    assert!(refused.text.contains("json, csv, svg and html"), "{}", refused.text);
}

/// Markup styles itself by what its policy names, has no script, and loads nothing.
fn check_self_contained(answer: &Answer) {
    let policy = answer.header("content-security-policy");
    for directive in ["default-src 'none'", "base-uri 'none'", "form-action 'none'"] {
        assert!(policy.contains(directive), "{policy}");
    }
    assert!(!policy.contains("unsafe"), "{policy}");
    let text = &answer.text;
    let mut styles = 0;
    for (start, _) in text.match_indices("<style") {
        let inside = &text[start + text[start..].find('>').unwrap() + 1..];
        let inside = &inside[..inside.find("</style>").unwrap()];
        // W3C Content Security Policy level 3, section 8.4: base64 of the digest of the element's text.
        let digest = STANDARD.encode(Sha256::digest(inside.as_bytes()));
        assert!(policy.contains(&format!("'sha256-{digest}'")), "{policy}");
        assert!(!inside.contains("url(") && !inside.contains("@import"), "{inside}");
        styles += 1;
    }
    assert!(styles > 0 || policy.contains("style-src 'none'"));
    for never in
        ["<script", "javascript:", " style=\"", " onload=", "<iframe", "<object", "<foreignObject", "src=\"http"]
    {
        assert!(!text.contains(never), "{never}");
    }
    let hrefs = text.match_indices("href=\"").map(|(start, _)| &text[start + 6..]);
    assert!(hrefs.into_iter().all(|href| href.starts_with("data:,\"") || href.starts_with('#')));
}

#[tokio::test]
async fn a_forecast_and_a_fit_come_in_every_form() {
    let service = patient().await;
    for (path, body) in [("/v1/forecasts", asked()), ("/v1/fits", fit_body())] {
        let run = service.post(path, &body).await.expect(201);
        let location = run.header("location").to_owned();
        check_forms(&service, &location).await;
        for (form, media) in FORMS {
            let made = service.post(&with(path, &format!("format={form}")), &body).await.expect(201);
            assert_eq!(media_type(&made), media);
            let kept = service.get(&with(made.header("location"), &format!("format={form}"))).await.expect(200);
            assert_eq!((&kept.text, kept.header("etag")), (&made.text, made.header("etag")), "{path} {form}");
        }
        let page = service.get(&with(&location, "format=html")).await.expect(200);
        let any = service.delete_if(&location, page.header("etag")).await;
        any.expect(204);
    }
}

#[tokio::test]
async fn what_is_kept_of_a_network_comes_in_every_form() {
    let service = tracked().await;
    settled(&service).await;
    let network = "/v1/networks/heronsgate";
    check_forms(&service, &format!("{network}/forecasts/latest")).await;
    for (runs, body) in [("forecasts", json!({})), ("fits", json!({}))] {
        for (form, media) in FORMS {
            let made = service.post(&format!("{network}/{runs}?format={form}"), &body).await.expect(201);
            assert_eq!(media_type(&made), media, "{runs}");
        }
    }
    let comparison = format!("{network}/comparison?scenarios=campaign");
    for (form, media) in FORMS {
        let answer = service.get(&format!("{comparison}&format={form}")).await.expect(200);
        assert_eq!((media_type(&answer), answer.header("vary")), (media, "accept"));
        assert_eq!(answer.header("cache-control"), "no-store");
        if ["svg", "html"].contains(&form) {
            check_self_contained(&answer);
        }
    }
    check_defaults(&service, &comparison).await;
    let page = service.get(&format!("{comparison}&format=html&theme=dark")).await.expect(200);
    let again = format!("curl -s &#39;http://{}{comparison}&#38;format=html&#39;", service.address());
    assert!(page.text.contains(&again), "{}", page.text);
    // Rows have no pictures.
    for path in ["accuracy", "snapshots/2026-06-01"] {
        let path = format!("{network}/{path}");
        let refused = service.get(&format!("{path}?format=svg")).await.expect_problem(400, "invalid_request");
        assert!(refused.text.contains("json and csv"), "{}", refused.text);
        service.get_with(&path, "accept", "text/html").await.expect_problem(406, "not_acceptable");
        assert_eq!(media_type(&service.get_with(&path, "accept", ADDRESS_BAR).await.expect(200)), "application/json");
    }
}

#[tokio::test]
async fn a_backtest_comes_in_every_form() {
    let service = patient().await;
    with_snapshots(&service, &settings(), 5).await;
    settled(&service).await;
    let made = service.post("/v1/networks/heronsgate/backtests", &json!({"thresholds": [3, 10]})).await;
    let location = made.expect(201).header("location").to_owned();
    check_forms(&service, &location).await;
    let run = service.get(&location).await.expect(200).json();
    let page = service.get(&format!("{location}?format=html")).await.expect(200).text.replace('\u{a0}', " ");
    let error = run["expected"][0]["pooled"]["mean_log_error"].as_f64().unwrap();
    for words in [run["verdict"].as_str().unwrap(), &format!("missed by {:.1} % one period ahead", 100.0 * error)] {
        assert!(page.contains(words), "{words}: {page}");
    }
    for option in ["chart=tail", "threshold=3", "part=tail"] {
        service.get(&format!("{location}?format=svg&{option}")).await.expect_problem(400, "invalid_request");
    }
}

#[tokio::test]
async fn an_option_that_does_nothing_is_refused() {
    let service = Service::start().await;
    let forecast = service.post("/v1/forecasts", &forecast_body()).await.expect(201).header("location").to_owned();
    let fit = service.post("/v1/fits", &fit_body()).await.expect(201).header("location").to_owned();
    for (path, query, place) in [
        (&forecast, "chart=tail", "chart"),
        (&forecast, "format=csv&chart=tail", "chart"),
        (&forecast, "format=html&chart=tail", "chart"),
        (&forecast, "format=html&threshold=10", "threshold"),
        (&forecast, "format=json&theme=dark", "theme"),
        (&forecast, "format=csv&theme=dark", "theme"),
        (&forecast, "format=svg&part=tail", "part"),
        (&forecast, "format=html&part=tail", "part"),
        (&forecast, "format=svg&chart=pie", "chart"),
        (&forecast, "format=svg&threshold=0", "threshold"),
        (&forecast, "format=svg&threshold=ten", "threshold"),
        (&forecast, "format=svg&theme=blue", "theme"),
        (&fit, "format=svg&chart=growth", "chart"),
        (&fit, "format=svg&threshold=10", "threshold"),
        (&fit, "format=csv&theme=light", "theme"),
        (&fit, "part=tail", "part"),
    ] {
        let refused = service.get(&format!("{path}?{query}")).await.expect_problem(400, "invalid_request");
        assert_eq!(refused.places(), [place], "{query}");
    }
    let all = service.get(&format!("{forecast}?format=svg&chart=pie&theme=blue&threshold=0")).await.expect(400);
    assert_eq!(all.places(), ["chart", "threshold", "theme"], "all faults at once");
    // Accept decides the form that options are held against.
    let picture = service.get_with(&format!("{forecast}?theme=dark"), "accept", PICTURE).await.expect(200);
    assert_eq!(media_type(&picture), "image/svg+xml");
}

#[tokio::test]
async fn each_chart_is_a_representation_of_its_own() {
    let service = patient().await;
    let run = service.post("/v1/forecasts", &asked()).await.expect(201);
    let location = run.header("location");
    let mut seen = BTreeSet::new();
    for query in [
        "",
        "&chart=growth&threshold=10",
        "&threshold=50",
        "&chart=tail",
        "&chart=tail&threshold=10",
        "&chart=scenarios",
        "&chart=scenarios&threshold=10",
        "&theme=dark",
        "&theme=light",
    ] {
        let path = format!("{location}?format=svg{query}");
        let chart = service.get(&path).await.expect(200);
        check_self_contained(&chart);
        assert!(chart.text.starts_with("<svg") && chart.text.contains("<title"), "{query}");
        assert!(seen.insert((chart.header("etag").to_owned(), chart.text.clone())), "{query}");
        service.get_with(&path, "if-none-match", chart.header("etag")).await.expect(304);
    }
    let tags: BTreeSet<_> = seen.iter().map(|(tag, _)| tag).collect();
    assert_eq!(tags.len(), seen.len());
    let default = service.get(&format!("{location}?format=svg")).await.expect(200);
    let named = service.get(&format!("{location}?format=svg&chart=growth&theme=auto")).await.expect(200);
    assert_eq!((default.text, default.headers.get("etag")), (named.text, named.headers.get("etag")));
}

#[tokio::test]
async fn a_chart_there_is_nothing_for_says_what_would_help_and_loses_no_run() {
    let service = Service::start().await;
    let refused = service.post("/v1/forecasts?format=svg&chart=scenarios", &forecast_body()).await;
    let refused = refused.expect_problem(422, "no_chart");
    let location = refused.header("location");
    assert!(refused.text.contains(location) && refused.text.contains("scenario"), "{}", refused.text);
    let run = service.get(location).await.expect(200).json();
    assert_eq!(run["scenarios"], json!([]));
    for query in ["chart=scenarios", "threshold=11"] {
        let refused = service.get(&format!("{location}?format=svg&{query}")).await.expect_problem(422, "no_chart");
        assert_eq!(refused.header("location"), "", "{query}");
    }
}

/// Every figure of the tables is in the report, as tables write it.
fn check_figures(run: &Value, page: &str) {
    let told = |value: &Value| {
        let text = figure(value.as_f64().unwrap()).replace('<', "&#60;");
        assert!(page.contains(&text), "{text} of {value}");
    };
    for at in run["forecast"].as_array().unwrap() {
        assert!(page.contains(at["date"].as_str().unwrap()));
        for count in at["tail"].as_array().unwrap().iter().chain([&at["nodes"]]) {
            let widest = count["intervals"].as_array().unwrap().last().unwrap();
            [&count["now"], &count["expected"], &widest["low"], &widest["high"]].into_iter().for_each(told);
        }
        told(&at["largest_degree"]["median"]);
    }
    for at in run["bands"]["dates"].as_array().unwrap() {
        told(&at["total"]["expected"]);
    }
    for at in run["next_hubs"].as_array().unwrap() {
        at["ranks"].as_array().unwrap().iter().for_each(|hub| told(&hub["expected"]));
    }
    for scenario in run["scenarios"].as_array().unwrap() {
        for tail in scenario["dates"].as_array().unwrap().iter().flat_map(|at| at["tail"].as_array().unwrap()) {
            told(&tail["scenario"]);
        }
    }
}

#[tokio::test]
async fn a_report_has_the_figures_and_words_of_the_run() {
    let service = patient().await;
    let run = service.post("/v1/forecasts", &changed(asked(), "/label", json!("spring plan"))).await.expect(201);
    let (location, document) = (run.header("location").to_owned(), run.json());
    let page = service.get(&format!("{location}?format=html")).await.expect(200).text.replace('\u{a0}', " ");
    check_figures(&document, &page);
    let list = |field: &str| document[field].as_array().unwrap().clone();
    let mut words: Vec<String> = list("cautions").iter().map(|caution| caution.as_str().unwrap().to_owned()).collect();
    words.extend(list("warnings").iter().map(|warning| warning["detail"].as_str().unwrap().to_owned()));
    words.extend(list("limits").iter().map(|limit| limit["verdict"].as_str().unwrap().to_owned()));
    words.extend(list("scenarios").iter().map(|scenario| scenario["verdict"].as_str().unwrap().to_owned()));
    words.extend(
        ["engine", "inputs_digest", "created_at", "id"].map(|field| document[field].as_str().unwrap().to_owned()),
    );
    words.extend(
        ["Forecast · spring plan", "Costs in EUR/month", "Watched nodes", "ana", "Largest nodes"].map(str::to_owned),
    );
    words.push(format!("curl -s 'http://{}{location}?format=json'", service.address()));
    for words in words {
        let escaped = words.replace('&', "&#38;").replace('<', "&#60;").replace('>', "&#62;").replace('\'', "&#39;");
        assert!(page.contains(&escaped.replace('"', "&#34;")), "{words}");
    }
    assert!(page.starts_with("<!doctype html>\n<html lang=\"en\""));
    assert_eq!(page.matches("<h1>").count(), 1);
    assert_eq!(page.matches("<table>").count(), page.matches("<caption>").count());
    let ids: Vec<&str> = page.split(" id=\"").skip(1).map(|rest| rest.split('"').next().unwrap()).collect();
    assert_eq!(ids.iter().collect::<BTreeSet<_>>().len(), ids.len(), "{ids:?}");
    assert_eq!(page.matches("<svg").count(), 4, "growth under the limit and of all, tail, scenarios");
    let behind = service.request(Method::GET, &format!("{location}?format=html")).header("x-forwarded-proto", "https");
    assert!(answered(behind).await.text.contains(&format!("https://{}{location}", service.address())));
}

#[tokio::test]
async fn callers_texts_stay_texts() {
    let service = patient().await;
    let hostile = "<script>alert(1)</script><style>*{}</style>\"'&</title>--><img src=x onerror=alert(1)>";
    let mut body = changed(asked(), "/label", json!(hostile));
    for place in ["/limits/0/name", "/cost_unit", "/watch/nodes/0/name", "/scenarios/0/name"] {
        *body.pointer_mut(place).unwrap() = json!(&hostile[..60]);
    }
    let run = service.post("/v1/forecasts", &body).await.expect(201);
    for form in ["html", "svg", "svg&chart=scenarios", "svg&threshold=50"] {
        let answer = service.get(&format!("{}?format={form}", run.header("location"))).await.expect(200);
        check_self_contained(&answer);
        assert!(!answer.text.contains("<img"), "{form}");
    }
    let page = service.get(&format!("{}?format=html", run.header("location"))).await.expect(200).text;
    assert!(page.contains("&#60;script&#62;alert(1)&#60;/script&#62;"), "{page}");
}

#[test]
fn the_command_line_writes_charts_and_reports() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("spring plan.json"), asked().to_string()).unwrap();
    let answer = |arguments: &[&str]| {
        let mut command = command(folder.path());
        command.args(["forecast", "spring plan.json"]).args(arguments).env("TAILCAST_COMPUTE_BUDGET_SECONDS", "300");
        let output = run(command, "");
        let [out, told] = [output.stdout, output.stderr].map(|bytes| String::from_utf8(bytes).unwrap());
        (output.status.code(), out, told)
    };
    let (code, svg, _) = answer(&["--format", "svg", "--threshold", "50", "--theme", "dark"]);
    assert!(code == Some(0) && svg.starts_with("<svg") && svg.contains("50 links or more"), "{svg}");
    let (code, page, _) = answer(&["--format", "html", "--thresholds", "5,10"]);
    assert!(code == Some(0) && page.starts_with("<!doctype html>"), "{page}");
    let again = "tailcast forecast &#39;spring plan.json&#39; --thresholds 5,10 --format html";
    assert!(page.contains(again), "{page}");
    for (arguments, words) in [
        (&["--chart", "tail"][..], "--chart goes with --format svg"),
        (&["--format", "csv", "--theme", "dark"], "--theme goes with --format svg or html"),
        (&["--format", "html", "--threshold", "50"], "--threshold goes with --format svg"),
        (&["--format", "svg", "--part", "tail"], "--part goes with --format csv"),
        (&["--format", "svg", "--threshold", "7"], "no chart: "),
        (&["--format", "svg", "--threshold", "0"], "--threshold"),
    ] {
        let (code, out, told) = answer(arguments);
        assert!(code == Some(2) && out.is_empty() && told.contains(words), "{arguments:?}: {told}");
    }
}
