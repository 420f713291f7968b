//! Tracked networks that keep themselves up to date: plans, refreshes, the latest forecast, accounts, corrections.

use std::time::{Duration, Instant};

use reqwest::Method;
use serde_json::{Value, json};
use sqlx::{Connection, SqliteConnection};
use tailcast::growth::Simulation;
use tailcast::model::{ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, GrowthParameters};

use crate::harness::{Answer, COUNTS, Service, changed, csv, pairs};
use crate::jobs::is_live;
use crate::jobs::link_list;

const NETWORK: &str = "/v1/networks/heronsgate";
const LATEST: &str = "/v1/networks/heronsgate/forecasts/latest";

/// Settings with a plan of two months.
pub fn settings() -> Value {
    json!({
        "degree_kind": "received",
        "forecast_plan": {
            "thresholds": [5, 10, 20],
            "horizon": {"ends_after": "P2M", "every": "P1M"},
            "arrivals": {"per_day": 50.0},
        },
    })
}

/// Degree counts of a Heronsgate at the given days, grown with so many arrivals a day and links an arrival from the day.
pub fn grown(days: &[f64], forces: impl Fn(f64) -> (f64, f64)) -> Vec<DegreeCounts> {
    let founders = DegreeCounts::from_pairs(&[(0, 10), (2, 10)]).unwrap();
    let (mut counts, mut last) = (founders, 0.0);
    let mut grown = Vec::new();
    for (seed, &day) in days.iter().enumerate() {
        let (arrivals, links) = forces(day);
        let mix = AttachmentMix::new(0.7).unwrap();
        let arrivals = ArrivalPlan::constant(arrivals).unwrap();
        let forces =
            GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), links).unwrap();
        let mut network = Simulation::new(&counts, forces, 11 + seed as u64).unwrap();
        network.run_until(day - last).unwrap();
        (counts, last) = (network.degree_counts().unwrap(), day);
        grown.push(counts.clone());
    }
    grown
}

pub async fn put_counts(service: &Service, as_of: &str, counts: &DegreeCounts) -> Answer {
    let put = service.put(&format!("{NETWORK}/snapshots/{as_of}"), &json!({"degree_counts": pairs(counts)})).await;
    assert!([200, 201].contains(&put.status), "{}", put.text);
    put
}

/// The network's line in the list when no refresh of it is at work.
pub async fn settled(service: &Service) -> Value {
    let begun = Instant::now();
    loop {
        let line = service.get("/v1/networks").await.expect(200).json()["items"][0].clone();
        let jobs = service.get("/v1/jobs?network=heronsgate").await.expect(200).json();
        if line["refresh"]["state"] != "refreshing" && !jobs["items"].as_array().unwrap().iter().any(is_live) {
            return line;
        }
        assert!(begun.elapsed() < Duration::from_secs(120), "{line} {jobs}");
        tokio::time::sleep(Duration::from_millis(30)).await;
    }
}

async fn issued(service: &Service) -> Vec<Value> {
    let list = service.get("/v1/forecasts?network=heronsgate&limit=200").await.expect(200).json();
    list["items"].as_array().unwrap().iter().filter(|line| line["issued"] == true).cloned().collect()
}

async fn jobs_of(service: &Service, kind: &str) -> Vec<Value> {
    let list = service.get("/v1/jobs?network=heronsgate&limit=200").await.expect(200).json();
    list["items"].as_array().unwrap().iter().filter(|job| job["kind"] == kind).cloned().collect()
}

#[tokio::test]
async fn a_plan_is_checked_kept_and_answered() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    let kept = service.get(NETWORK).await.expect(200).json()["forecast_plan"].clone();
    let expected = json!({
        "thresholds": [5, 10, 20], "horizon": {"ends_after": "P2M", "every": "P1M"}, "levels": [0.5, 0.9],
        "arrivals": {"per_day": 50.0, "growth_per_year": 0.0},
    });
    assert_eq!(kept, expected);
    // What is answered can be sent back.
    service.put(NETWORK, &changed(settings(), "/forecast_plan", kept)).await.expect(200);
    for (pointer, value, place) in [
        ("/forecast_plan/thresholds", json!([0]), "/forecast_plan/thresholds/0"),
        ("/forecast_plan/thresholds", Value::Null, "/forecast_plan"),
        ("/forecast_plan/horizon", Value::Null, "/forecast_plan"),
        ("/forecast_plan/horizon/until", json!("2027-01-01"), "/forecast_plan/horizon"),
        ("/forecast_plan/horizon/ends_after", Value::Null, "/forecast_plan/horizon"),
        ("/forecast_plan/horizon/ends_after", json!("P3W2"), "/forecast_plan/horizon/ends_after"),
        ("/forecast_plan/horizon/ends_after", json!("P20D"), "/forecast_plan/horizon/ends_after"),
        ("/forecast_plan/horizon/ends_after", json!("P900Y"), "/forecast_plan/horizon"),
        ("/forecast_plan/horizon/every", json!("P0D"), "/forecast_plan/horizon/every"),
        ("/forecast_plan/levels", json!([1.5]), "/forecast_plan/levels/0"),
        ("/forecast_plan/arrivals", json!({"per_day": -1.0}), "/forecast_plan/arrivals/per_day"),
        ("/forecast_plan/arrival", json!({"per_day": 1.0}), "/forecast_plan/arrival"),
        ("/forecast_plan", json!([]), "/forecast_plan"),
    ] {
        let answer = service.put(NETWORK, &changed(settings(), pointer, value.clone())).await;
        let answer = answer.expect_problem(400, "invalid_request");
        assert!(answer.places().contains(&place.to_owned()), "{pointer} {value}: {}", answer.text);
    }
    let segments =
        json!({"segments": [{"from": "2026-01-01", "per_day": 4.0}, {"from": "2026-09-01", "per_day": 6.0}]});
    service.put(NETWORK, &changed(settings(), "/forecast_plan/arrivals", segments.clone())).await.expect(200);
    let kept = service.get(NETWORK).await.expect(200).json()["forecast_plan"]["arrivals"]["segments"].clone();
    assert_eq!(kept[1], json!({"from": "2026-09-01T00:00:00Z", "per_day": 6.0, "growth_per_year": 0.0}));
}

#[tokio::test]
async fn what_a_run_is_not_asked_comes_from_the_plan() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-06-01", &COUNTS[1]).await;
    let path = format!("{NETWORK}/forecasts");
    let run = service.post(&path, &json!({})).await.expect(201).json();
    let dates =
        |run: &Value| run["forecast"].as_array().unwrap().iter().map(|at| at["date"].clone()).collect::<Vec<_>>();
    assert_eq!(dates(&run), ["2026-07-01", "2026-08-01"]);
    let thresholds: Vec<_> = run["forecast"][0]["tail"].as_array().unwrap().iter().map(|r| &r["threshold"]).collect();
    assert_eq!(thresholds, [5, 10, 20]);
    let body = json!({"thresholds": [7], "dates": ["2027-01-01"], "levels": [0.8], "arrivals": {"per_day": 10}});
    let run = service.post(&path, &body).await.expect(201).json();
    assert_eq!(dates(&run), ["2027-01-01"]);
    assert_eq!(run["forecast"][0]["tail"][0]["intervals"][0]["level"], 0.8);
    assert!(run["forecast"][0]["nodes"]["expected"].as_f64().unwrap() < 7_000.0, "its own arrivals, not the plan's");
    let run = service.post(&path, &json!({"horizon": {"ends_after": "P1M", "every": "P10D"}})).await.expect(201).json();
    assert_eq!(dates(&run), ["2026-06-11", "2026-06-21", "2026-07-01"]);
    let refused = service.post(&path, &json!({"horizon": {"ends_after": "P1D", "every": "P10D"}})).await;
    assert_eq!(refused.expect(400).places(), ["/horizon/ends_after"]);
    let lines = service.get("/v1/forecasts?network=heronsgate").await.expect(200).json();
    let asked = lines["items"].as_array().unwrap().iter().filter(|line| line["issued"] == false).count();
    assert_eq!(asked, 3, "runs that are asked for are what-ifs");
}

#[tokio::test]
async fn a_landing_snapshot_makes_the_latest_forecast_anew() {
    let service = Service::start().await;
    service.get(LATEST).await.expect_problem(404, "not_found");
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(201);
    let none = service.get(LATEST).await.expect_problem(404, "no_forecast");
    assert!(none.text.contains("no forecast_plan"), "{}", none.text);
    put_counts(&service, "2026-05-02", &COUNTS[0]).await;
    assert_eq!(settled(&service).await["refresh"], Value::Null, "nothing follows without a plan");
    service.put(NETWORK, &settings()).await.expect(200);
    assert_eq!(settled(&service).await["refresh"]["state"], "current");
    let first = service.get(LATEST).await.expect(200);
    assert_eq!((first.header("forecast-state"), &first.json()["network"]), ("current", &json!("heronsgate")));
    assert_eq!(first.json()["forecast"][0]["date"], "2026-06-02");
    let kept = service.get(first.header("content-location")).await.expect(200);
    assert_eq!((&kept.text, kept.header("etag")), (&first.text, first.header("etag")));
    assert_eq!(first.header("cache-control"), "private, max-age=3600, must-revalidate", "a month's hundredth is more");
    assert!(!first.header("last-modified").is_empty());
    let unchanged = service.get_with(LATEST, "if-none-match", first.header("etag")).await.expect(304);
    assert_eq!(unchanged.header("forecast-state"), "current");
    let table = service.get(&format!("{LATEST}?format=csv")).await.expect(200);
    assert!(table.text.starts_with("date,threshold,now,expected,median"), "{}", table.text);
    // A change of nothing but words makes no forecast.
    service.put(NETWORK, &changed(settings(), "/description", json!("followers"))).await.expect(200);
    put_counts(&service, "2026-06-01", &COUNTS[1]).await.expect(201);
    settled(&service).await;
    let second = service.get(LATEST).await.expect(200);
    assert_eq!(second.json()["forecast"][0]["date"], "2026-07-01");
    // The same counts again change nothing at all.
    let line = service.get(&format!("{NETWORK}/snapshots")).await.expect(200).json()["items"][1].clone();
    let again = put_counts(&service, "2026-06-01", &COUNTS[1]).await.expect(200);
    assert_eq!(again.json(), line);
    assert_eq!(service.get(LATEST).await.expect(200).text, second.text);
    assert_eq!(issued(&service).await.len(), 2);
    let refreshes = jobs_of(&service, "refresh").await;
    assert_eq!(refreshes.len(), 2, "{refreshes:?}");
    assert!(refreshes.iter().all(|job| job["state"] == "succeeded"), "{refreshes:?}");
    assert_eq!(refreshes[0]["result"]["forecast"], second.json()["id"]);
    assert!(second.header("link").contains(refreshes[0]["id"].as_str().unwrap()));
}

#[tokio::test]
async fn a_plan_that_is_taken_away_during_a_refresh_leaves_none_at_work() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-05-02", &COUNTS[0]).await;
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(200);
    let line = settled(&service).await;
    assert!(["outdated", "current"].contains(&line["refresh"]["state"].as_str().unwrap()), "{line}");
}

#[tokio::test]
async fn a_burst_of_changes_is_one_forecast() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    settled(&service).await;
    let days: Vec<f64> = (1..=12).map(|month| 10.0 * f64::from(month)).collect();
    let counts = grown(&days, |_| (50.0, 3.0));
    for (day, counts) in days.iter().zip(&counts) {
        put_counts(&service, &format!("2026-{:02}-01", (day / 10.0) as u64), counts).await;
    }
    settled(&service).await;
    let refreshes = jobs_of(&service, "refresh").await;
    assert!(refreshes.len() < 12, "{} refreshes for 12 snapshots", refreshes.len());
    let stored: Vec<_> = refreshes.iter().filter(|job| !job["result"]["forecast"].is_null()).collect();
    assert_eq!(stored.len(), issued(&service).await.len());
    for job in refreshes.iter().filter(|job| job["state"] == "succeeded" && job["result"]["forecast"].is_null()) {
        let reason = job["result"]["reason"].as_str().unwrap();
        assert!(reason.contains("later refresh") || reason.contains("already stood"), "{job}");
    }
    let latest = service.get(LATEST).await.expect(200);
    assert_eq!(
        (latest.header("forecast-state"), &latest.json()["forecast"][0]["date"]),
        ("current", &json!("2027-01-01"))
    );
}

#[tokio::test]
async fn a_refresh_without_a_forecast_says_why_and_keeps_the_one_before() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    let line = settled(&service).await;
    assert_eq!(line["refresh"]["state"], "outdated");
    assert!(line["refresh"]["reason"].as_str().unwrap().contains("no snapshot"), "{line}");
    let none = service.get(LATEST).await.expect_problem(404, "no_forecast");
    assert!(none.text.contains("the network has no snapshot"), "{}", none.text);
    let job = &jobs_of(&service, "refresh").await[0];
    assert_eq!((&job["state"], &job["problem"]["code"]), (&json!("failed"), &json!("no_snapshot")));
    put_counts(&service, "2026-06-01", &COUNTS[1]).await;
    settled(&service).await;
    let kept = service.get(LATEST).await.expect(200);
    // A plan that ends before the newest snapshot.
    let over = changed(settings(), "/forecast_plan/horizon", json!({"until": "2026-05-01", "every": "P1M"}));
    service.put(NETWORK, &over).await.expect(200);
    let line = settled(&service).await;
    assert!(line["refresh"]["reason"].as_str().unwrap().contains("before its first date"), "{line}");
    let latest = service.get(LATEST).await.expect(200);
    assert_eq!((latest.header("forecast-state"), &latest.text), ("outdated", &kept.text));
    // One snapshot and no arrivals.
    service.put(NETWORK, &changed(settings(), "/forecast_plan/arrivals", Value::Null)).await.expect(200);
    assert!(settled(&service).await["refresh"]["reason"].as_str().unwrap().contains("second snapshot"));
    // Without a plan there is none to make.
    service.put(NETWORK, &json!({"degree_kind": "received"})).await.expect(200);
    let line = settled(&service).await;
    assert!(line["refresh"]["reason"].as_str().unwrap().contains("no forecast_plan"), "{line}");
    assert_eq!(jobs_of(&service, "refresh").await[0]["state"], "succeeded");
    service.put(NETWORK, &settings()).await.expect(200);
    settled(&service).await;
    let latest = service.get(LATEST).await.expect(200);
    assert_eq!(latest.header("forecast-state"), "current");
    // One that is deleted is made again when the settings are stored again.
    service.send(Method::DELETE, latest.header("content-location")).await.expect(204);
    let none = service.get(LATEST).await.expect_problem(404, "no_forecast");
    assert!(none.text.contains("deleted"), "{}", none.text);
    service.put(NETWORK, &settings()).await.expect(200);
    settled(&service).await;
    assert_eq!(service.get(LATEST).await.expect(200).json()["forecast"], latest.json()["forecast"]);
}

#[tokio::test]
async fn forecasts_are_held_against_what_came_and_a_correction_is_told() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    let none = service.get(&format!("{NETWORK}/accuracy")).await.expect(200).json();
    assert!(none["verdict"].as_str().unwrap().contains("No forecast has met"), "{none}");
    assert_eq!((&none["summary"], &none["drift"]), (&Value::Null, &Value::Null));
    let counts = grown(&[60.0, 91.0, 106.0, 121.0], |_| (50.0, 3.0));
    for (as_of, counts) in ["2026-05-01", "2026-06-01", "2026-06-16", "2026-07-01"].iter().zip(&counts) {
        put_counts(&service, as_of, counts).await;
        settled(&service).await;
    }
    let report = service.get(&format!("{NETWORK}/accuracy")).await.expect(200);
    service.get_with(&format!("{NETWORK}/accuracy"), "if-none-match", report.header("etag")).await.expect(304);
    let report = report.json();
    let forecasts = report["forecasts"].as_array().unwrap();
    let met: Vec<(&str, usize)> =
        forecasts.iter().map(|f| (f["origin"].as_str().unwrap(), f["dates"].as_array().unwrap().len())).collect();
    assert_eq!(met, [("2026-06-16", 1), ("2026-06-01", 2), ("2026-05-01", 3)]);
    let first = &forecasts[2]["dates"][0];
    assert_eq!((&first["as_of"], &first["days_ahead"]), (&json!("2026-06-01"), &json!(31.0)));
    let row = &first["tail"][0];
    assert_eq!((&row["threshold"], &row["observed"]), (&json!(5), &json!(counts[1].tail_size(5))));
    let run = service.get(&format!("/v1/forecasts/{}", forecasts[2]["id"].as_str().unwrap())).await.expect(200);
    assert_eq!(row["expected"], run.json()["forecast"][0]["tail"][0]["expected"], "a date that was forecast");
    assert_eq!(report["summary"]["outcomes"], 18);
    assert!(report["verdict"].as_str().unwrap().contains("of outcomes lay within their 90 % intervals"), "{report}");
    assert_eq!(report["drift"]["dates"], 3);
    let table = service.get_with(&format!("{NETWORK}/accuracy"), "accept", "text/csv").await.expect(200).text;
    assert!(
        table.starts_with("forecast,origin,as_of,days_ahead,threshold,observed,expected,median,log_error"),
        "{table}"
    );
    assert_eq!(table.trim_end().lines().count(), 19);
    // A correction: the forecasts that stood on it are marked and stay, what it showed of earlier ones is told anew.
    let before = issued(&service).await;
    assert!(before.iter().all(|line| line["evidence_corrected_at"].is_null()), "{before:?}");
    let corrected = grown(&[95.0], |_| (50.0, 3.0));
    put_counts(&service, "2026-06-01", &corrected[0]).await.expect(200);
    assert_eq!(settled(&service).await["refresh"]["state"], "current");
    let after = issued(&service).await;
    let marked: Vec<bool> = after.iter().map(|line| !line["evidence_corrected_at"].is_null()).collect();
    assert_eq!(marked, [false, true, true, true, false], "newest first; the first one came before the snapshot");
    assert_eq!(
        service.get(&format!("/v1/forecasts/{}", run.json()["id"].as_str().unwrap())).await.expect(200).text,
        run.text
    );
    let report = service.get(&format!("{NETWORK}/accuracy")).await.expect(200).json();
    let forecasts = report["forecasts"].as_array().unwrap();
    assert_eq!(forecasts[2]["dates"][0]["tail"][0]["observed"], json!(corrected[0].tail_size(5)));
    assert_eq!(
        (&forecasts[2]["evidence_corrected_at"], forecasts[1]["evidence_corrected_at"].is_string()),
        (&Value::Null, true)
    );
    // A snapshot that goes takes its accounts along.
    service.send(Method::DELETE, &format!("{NETWORK}/snapshots/2026-06-01")).await.expect(204);
    settled(&service).await;
    let report = service.get(&format!("{NETWORK}/accuracy")).await.expect(200).json();
    let dates: Vec<&Value> = report["forecasts"]
        .as_array()
        .unwrap()
        .iter()
        .flat_map(|f| f["dates"].as_array().unwrap())
        .map(|d| &d["as_of"])
        .collect();
    assert!(!dates.contains(&&json!("2026-06-01")) && dates.contains(&&json!("2026-06-16")), "{dates:?}");
}

#[tokio::test]
async fn outcomes_that_miss_again_and_again_are_warned_of_with_their_cause() {
    let service = Service::start().await;
    service.put(NETWORK, &settings()).await.expect(201);
    // Twice as many arrive as planned.
    let days: Vec<f64> = (2..8).map(|month| 30.0 * f64::from(month)).collect();
    let counts = grown(&days, |day| (if day > 60.0 { 100.0 } else { 50.0 }, 3.0));
    for (month, counts) in counts.iter().enumerate() {
        put_counts(&service, &format!("2026-{:02}-01", month + 1), counts).await;
        settled(&service).await;
    }
    let report = service.get(&format!("{NETWORK}/accuracy")).await.expect(200).json();
    assert_eq!(report["drift"]["warns"], true, "{}", report["drift"]);
    assert!(report["drift"]["causes"].as_array().unwrap().contains(&json!("arrivals")), "{}", report["drift"]);
    assert_eq!(report["warnings"][0]["code"], "drift");
    assert!(report["verdict"].as_str().unwrap().contains("arrivals went off their plan"), "{}", report["verdict"]);
}

#[tokio::test(flavor = "multi_thread")]
async fn refreshes_leave_link_lists_their_places_and_go_with_their_network() {
    let service = Service::start_with(|config| config.jobs.queue = 0).await;
    service.put(NETWORK, &settings()).await.expect(201);
    let list = link_list(3_000);
    for _ in 0..3 {
        service.put_with(&format!("{NETWORK}/links?every=P1M"), csv(&list), &[]).await.expect(200);
        assert_eq!(settled(&service).await["refresh"]["state"], "current");
    }
    let counted = jobs_of(&service, "link_list").await;
    assert!(counted.len() == 3 && counted.iter().all(|job| job["state"] == "succeeded"), "{counted:?}");
    // What the second and third list left as it was marks no run.
    let issued = issued(&service).await;
    assert!(!issued.is_empty() && issued.iter().all(|line| line["evidence_corrected_at"].is_null()));
    let refresh = jobs_of(&service, "refresh").await[0]["id"].as_str().unwrap().to_owned();
    service.send(Method::DELETE, &format!("/v1/jobs/{refresh}")).await.expect(204);
    service.send(Method::DELETE, NETWORK).await.expect(204);
    service.get(LATEST).await.expect_problem(404, "not_found");
    service.put(NETWORK, &settings()).await.expect(201);
    settled(&service).await;
    service.get(LATEST).await.expect_problem(404, "no_forecast");
    let report = service.get(&format!("{NETWORK}/accuracy")).await.expect(200).json();
    assert_eq!(report["forecasts"], json!([]), "a new network of the name answers for nothing before it");
}

#[tokio::test(flavor = "multi_thread")]
async fn a_refresh_that_is_called_off_leaves_word() {
    let folder = tempfile::tempdir().unwrap();
    let url = format!("sqlite://{}", folder.path().join("called_off.db").display());
    // Hold the only worker with nothing: none but the row itself is live.
    let service = Service::start_with(|config| config.database.url = url.clone()).await;
    service.put(NETWORK, &settings()).await.expect(201);
    put_counts(&service, "2026-06-01", &COUNTS[1]).await;
    settled(&service).await;
    let job = uuid::Uuid::now_v7().to_string();
    let mut database = SqliteConnection::connect(&url).await.unwrap();
    for statement in [
        "INSERT INTO jobs (id, kind, network, state, starts, created_at, task) VALUES ($1, 'refresh', 'heronsgate', 'waiting', 0, 1, '{}')",
        "UPDATE networks SET refresh_state = 'refreshing', refresh_job = $1",
    ] {
        sqlx::query(statement).bind(&job).execute(&mut database).await.unwrap();
    }
    service.send(Method::DELETE, &format!("/v1/jobs/{job}")).await.expect(204);
    let line = settled(&service).await;
    assert!(line["refresh"]["reason"].as_str().unwrap().contains("called off"), "{line}");
    assert_eq!(service.get(LATEST).await.expect(200).header("forecast-state"), "outdated");
    assert_eq!(service.get(&format!("/v1/jobs/{job}")).await.expect(200).json()["state"], "cancelled");
    // Storing the settings again makes another.
    service.put(NETWORK, &settings()).await.expect(200);
    assert_eq!(settled(&service).await["refresh"]["state"], "current");
}
