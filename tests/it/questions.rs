//! What is asked besides the tails: read with every fault's place, part of the digest, answered in every form.

use serde_json::{Value, json};
use tailcast::api::{read_forecast, read_json};
use tailcast::config::Config;
use tailcast::service::sha256_hex;

use crate::harness::{Service, changed, forecast_body};
use crate::process::{command, run};

/// A service that waits for many answers on a busy machine.
pub async fn patient() -> Service {
    Service::start_with(|config| config.compute.budget_seconds = 300).await
}

/// Every question at once, about the network of `forecast_body`.
pub fn asked() -> Value {
    let questions = json!({
        "limits": [
            {"name": "fan-out shards", "threshold": 50, "max_nodes": 100, "by": "2026-10-01", "risk": 0.1},
            {"threshold": 10, "max_nodes": 0, "by": "2026-08-01T12:00:00Z"},
        ],
        "bands": [{"from": 0, "to": 9, "per_node": 0.001}, {"from": 10, "per_node": 4.0, "per_link": 0.0002}],
        "cost_unit": "EUR/month",
        "watch": {
            "nodes": [{"name": "ana", "degree": 40}, {"name": "ben", "degree": 3}],
            "classes": [{"from": 20, "to": 49}],
            "thresholds": [50],
        },
        "next_hubs": 3,
        "scenarios": [
            {"name": "campaign", "arrivals_factor": 1.2},
            {"name": "spread", "preferential_share": 0.5, "degree_cap": {"links": 60, "refused": "spread"}},
            {"name": "plan", "arrivals": {"per_day": 60, "growth_per_year": 0.1}, "links_per_arrival": 4,
             "departures_per_node_day": 0.0001},
        ],
    });
    let mut body = forecast_body();
    body.as_object_mut().unwrap().extend(questions.as_object().unwrap().clone());
    body
}

#[tokio::test]
async fn questions_are_taken_and_have_their_place_in_the_answer() {
    let service = patient().await;
    let run = service.post("/v1/forecasts", &asked()).await.expect(201).json();
    for field in ["limits", "next_hubs", "scenarios"] {
        assert!(run[field].is_array(), "{field}");
    }
    let plain = service.post("/v1/forecasts", &forecast_body()).await.expect(201).json();
    let none = (json!([]), json!(null));
    for field in ["limits", "next_hubs", "scenarios"] {
        assert_eq!(plain[field], none.0, "{field}");
    }
    for field in ["bands", "watch"] {
        assert_eq!(plain[field], none.1, "{field}");
    }
    assert_eq!(run["forecast"], plain["forecast"], "questions change nothing of the tails");
    assert_ne!(run["inputs_digest"], plain["inputs_digest"]);
}

/// The digest of inputs without questions, as it was before there were any: from the version before.
#[test]
fn inputs_without_questions_keep_their_digest_and_equal_questions_share_theirs() {
    let limits = Config::from_sources(None, std::iter::empty()).unwrap().limits;
    let digest = |body: &Value| {
        let inputs = read_json(body.to_string().as_bytes(), |raw, faults| read_forecast(raw, &limits, faults));
        let canonical = inputs.unwrap_or_else(|error| panic!("{error:?}")).canonical().unwrap();
        format!("sha-256:{}", sha256_hex(canonical.as_bytes()))
    };
    let fixed = json!({
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": [[0, 5400], [1, 2210], [2, 990], [40, 3]]}],
        "arrivals": {"per_day": 42.0}, "links_per_arrival": 3.1, "fixed": {"preferential_share": 0.7},
        "thresholds": [10, 100], "dates": ["2026-12-01"],
    });
    assert_eq!(digest(&fixed), DIGEST_BEFORE);
    let first = digest(&asked());
    let bands =
        json!([{"from": 10, "per_node": 4, "per_link": 0.0002}, {"from": 0, "to": 9, "per_node": 1e-3, "per_link": 0}]);
    assert_eq!(digest(&changed(asked(), "/bands", bands)), first, "bands in another order and spelling");
    let limit = json!({"threshold": 10, "max_nodes": 0, "by": "2026-08-01T12:00:00Z", "risk": 0.05});
    assert_eq!(digest(&changed(asked(), "/limits/1", limit)), first, "the default risk");
    for (pointer, value) in [
        ("/limits/0/max_nodes", json!(101)),
        ("/limits/0/risk", json!(0.2)),
        ("/bands/1/per_link", json!(0.0003)),
        ("/cost_unit", json!("USD/month")),
        ("/watch/nodes/0/degree", json!(41)),
        ("/watch/thresholds", json!(null)),
        ("/next_hubs", json!(4)),
        ("/scenarios/0/arrivals_factor", json!(1.3)),
        ("/scenarios/1/degree_cap/refused", json!("lost")),
        ("/scenarios/2/arrivals/per_day", json!(61)),
    ] {
        assert_ne!(digest(&changed(asked(), pointer, value)), first, "{pointer}");
    }
}

const DIGEST_BEFORE: &str = "sha-256:b6a87d77d019693c99a09822800511db06de58438be7916fcd6ded23055660bb";

#[tokio::test]
async fn every_fault_of_a_question_has_its_place() {
    let service = Service::start().await;
    for (pointer, value, place) in [
        ("/limits", json!({}), "/limits"),
        ("/limits/0/threshold", json!(0), "/limits/0/threshold"),
        ("/limits/0/threshold", json!(null), "/limits/0"),
        ("/limits/0/max_nodes", json!(-1), "/limits/0/max_nodes"),
        ("/limits/0/by", json!("2026-06-01"), "/limits/0/by"),
        ("/limits/0/by", json!("2326-06-01"), "/limits/0/by"),
        ("/limits/0/by", json!("soon"), "/limits/0/by"),
        ("/limits/0/risk", json!(1), "/limits/0/risk"),
        ("/limits/0/name", json!(""), "/limits/0/name"),
        ("/limits/0/nodes", json!(3), "/limits/0/nodes"),
        ("/limits", json!(vec![json!({"threshold": 1, "max_nodes": 1, "by": "2026-07-01"}); 51]), "/limits"),
        ("/bands", json!([]), "/bands"),
        ("/bands/0/to", json!(10), "/bands/0/to"),
        ("/bands/0/to", json!(null), "/bands/0/to"),
        ("/bands/0/per_node", json!(null), "/bands/0"),
        ("/bands/1/per_link", json!(-1), "/bands/1/per_link"),
        ("/bands", json!(null), "/cost_unit"),
        ("/cost_unit", json!("a\u{0}b"), "/cost_unit"),
        ("/watch", json!({}), "/watch"),
        ("/watch/nodes/0/name", json!(null), "/watch/nodes/0"),
        ("/watch/nodes/1/degree", json!(1.5), "/watch/nodes/1/degree"),
        ("/watch/classes/0/to", json!(3), "/watch/classes/0"),
        ("/watch/thresholds", json!([0]), "/watch/thresholds/0"),
        ("/next_hubs", json!(0), "/next_hubs"),
        ("/next_hubs", json!(101), "/next_hubs"),
        ("/scenarios/1/name", json!("campaign"), "/scenarios/1/name"),
        ("/scenarios/0/arrivals_factor", json!(null), "/scenarios/0"),
        ("/scenarios/0/arrivals_factor", json!(-0.5), "/scenarios/0/arrivals_factor"),
        ("/scenarios/0/arrivals", json!({"per_day": 3}), "/scenarios/0"),
        ("/scenarios/0/links_factor", json!(1e9), "/scenarios/0/links_factor"),
        ("/scenarios/1/preferential_share", json!(1.5), "/scenarios/1/preferential_share"),
        ("/scenarios/1/degree_cap/links", json!(0), "/scenarios/1/degree_cap/links"),
        ("/scenarios/1/degree_cap/refused", json!("kept"), "/scenarios/1/degree_cap/refused"),
        ("/scenarios/2/arrivals/per_day", json!(-1), "/scenarios/2/arrivals/per_day"),
        ("/scenarios/2/departures_per_node_day", json!("x"), "/scenarios/2/departures_per_node_day"),
    ] {
        let refused = service.post("/v1/forecasts", &changed(asked(), pointer, value.clone())).await;
        let refused = refused.expect_problem(400, "invalid_request");
        assert_eq!(refused.places(), [place], "{pointer} = {value}: {}", refused.text);
    }
    let all = changed(changed(asked(), "/limits/1/threshold", json!(0)), "/watch/classes/0/from", json!(-1));
    let all = changed(changed(all, "/scenarios/0/name", json!(null)), "/next_hubs", json!("three"));
    let refused = service.post("/v1/forecasts", &all).await.expect_problem(400, "invalid_request");
    assert_eq!(refused.places(), ["/limits/1/threshold", "/watch/classes/0/from", "/next_hubs", "/scenarios/0"]);
}

#[tokio::test]
async fn questions_count_as_work() {
    let service = Service::start_with(|config| config.limits.cells = 10).await;
    service.post("/v1/forecasts", &forecast_body()).await.expect(201);
    let body = asked();
    for (field, value) in [
        ("limits", json!(vec![body["limits"][1].clone(); 6])),
        ("watch", json!({"nodes": vec![json!({"name": "ana", "degree": 3}); 3]})),
        ("next_hubs", json!(6)),
        ("scenarios", body["scenarios"].clone()),
    ] {
        let refused = service.post("/v1/forecasts", &changed(forecast_body(), &format!("/{field}"), value)).await;
        let refused = refused.expect_problem(400, "invalid_request");
        assert_eq!(refused.places(), [format!("/{field}")]);
        assert!(refused.text.contains("split the request"), "{}", refused.text);
    }
}

#[tokio::test]
async fn a_table_tells_one_part() {
    let service = patient().await;
    let made = service.post("/v1/forecasts", &asked()).await.expect(201);
    let path = made.header("location").to_owned();
    let tail = service.get(&format!("{path}?format=csv")).await.expect(200);
    let mut tags = vec![made.header("etag").to_owned(), tail.header("etag").to_owned()];
    assert_eq!(service.get(&format!("{path}?format=csv&part=tail")).await.expect(200).text, tail.text);
    for (part, header) in [
        ("limits", "limit,threshold,max_nodes,by,risk,now,headroom,date,exceeding,crossed,"),
        ("bands", "date,band,from,to,nodes,links,expected,low_50,high_50,low_90,high_90,cost_unit,"),
        ("watch", "watched,from,to,nodes,date,threshold,quantity,expected,low_50,"),
        ("next_hubs", "date,rank,now,expected,low_50,high_50,low_90,high_90,median,"),
        ("scenarios", "scenario,date,threshold,standing_size,scenario_size,expected,low_50,"),
    ] {
        let address = format!("{path}?format=csv&part={part}");
        let table = service.get(&address).await.expect(200);
        assert!(table.text.starts_with(header), "{}", table.text);
        let mut reader = csv::Reader::from_reader(table.text.as_bytes());
        assert!(reader.records().all(|record| record.is_ok()), "every row is as long as the header: {}", table.text);
        let tag = table.header("etag").to_owned();
        service.get_with(&address, "if-none-match", &tag).await.expect(304);
        assert!(!tags.contains(&tag), "{part} is a representation of its own");
        tags.push(tag);
    }
    for query in ["format=csv&part=hubs", "part=limits", "format=json&part=tail"] {
        let refused = service.get(&format!("{path}?{query}")).await.expect_problem(400, "invalid_request");
        assert_eq!(refused.places(), ["part"], "{query}");
    }
    let limits = service.post("/v1/forecasts?format=csv&part=limits", &asked()).await.expect(201);
    assert!(limits.text.starts_with("limit,"));
    service.delete_if(&path, &tags.pop().unwrap()).await.expect(204);
}

#[test]
fn the_command_line_prints_the_answers_within_a_hundred_columns() {
    let folder = tempfile::tempdir().unwrap();
    let answer = |arguments: &[&str]| {
        let mut command = command(folder.path());
        command.args(["forecast", "-"]).args(arguments).env("TAILCAST_COMPUTE_BUDGET_SECONDS", "300");
        let output = run(command, &asked().to_string());
        let texts = [output.stdout, output.stderr].map(|bytes| String::from_utf8(bytes).unwrap());
        (output.status.code(), texts)
    };
    let (code, [table, _]) = answer(&[]);
    assert_eq!(code, Some(0));
    for words in [
        "Limit fan-out shards: at most 100 nodes with >= 50 links until 2026-10-01, at a risk of 10 %",
        "Costs in EUR/month: now ",
        "Watched nodes, and their chance",
        "ana",
        "nodes with 20 to 49 links",
        "Largest nodes",
        "What if: campaign",
        "as it stands",
    ] {
        assert!(table.contains(words), "{words}: {table}");
    }
    let is_digest = |line: &str| line.contains("sha-256:");
    assert!(table.lines().filter(|line| !is_digest(line)).all(|line| line.chars().count() <= 100), "{table}");
    let (code, [csv, _]) = answer(&["--format", "csv", "--part", "next_hubs"]);
    assert_eq!((code, csv.lines().next().map(|line| line.starts_with("date,rank,"))), (Some(0), Some(true)), "{csv}");
    let (code, [_, told]) = answer(&["--part", "limits"]);
    assert_eq!(code, Some(2));
    assert!(told.contains("--format csv"), "{told}");
}

#[tokio::test]
async fn every_answer_is_in_json_as_it_was_asked() {
    let service = patient().await;
    let run = service.post("/v1/forecasts", &asked()).await.expect(201).json();
    let limit = &run["limits"][0];
    for (field, value) in asked()["limits"][0].as_object().unwrap() {
        assert_eq!(&limit[field], value, "{field}");
    }
    assert_eq!((&run["limits"][1]["name"], &run["limits"][1]["risk"]), (&json!(null), &json!(0.05)));
    let last = limit["dates"].as_array().unwrap().iter().find(|at| at["date"] == "2026-10-01").unwrap();
    assert_eq!(last, &limit["at_by"]);
    let chances: Vec<_> = limit["crossing"].as_array().unwrap().iter().map(|at| &at["probability"]).collect();
    assert_eq!(chances, [&json!(0.05), &json!(0.5), &json!(0.95)]);
    assert_eq!((&run["bands"]["cost_unit"], run["bands"]["dates"].as_array().unwrap().len()), (&json!("EUR/month"), 2));
    assert_eq!(run["bands"]["dates"][0]["bands"].as_array().unwrap().len(), 2);
    assert_eq!((&run["watch"]["nodes"][0]["name"], &run["watch"]["nodes"][0]["degree"]), (&json!("ana"), &json!(40)));
    assert_eq!((&run["watch"]["classes"][0]["from"], &run["watch"]["classes"][0]["to"]), (&json!(20), &json!(49)));
    assert_eq!(run["next_hubs"][1]["ranks"].as_array().unwrap().len(), 3);
    let names: Vec<_> = run["scenarios"].as_array().unwrap().iter().map(|scenario| &scenario["name"]).collect();
    assert_eq!(names, ["campaign", "spread", "plan"]);
    for scenario in run["scenarios"].as_array().unwrap() {
        assert_eq!(scenario["limits"].as_array().unwrap().len(), 2);
        let difference = &scenario["dates"][1]["tail"][0];
        let [what_if, standing] = ["scenario", "standing"].map(|field| difference[field].as_f64().unwrap());
        let expected = difference["difference"]["expected"].as_f64().unwrap();
        assert!((expected - (what_if - standing)).abs() < 1e-6 * standing.max(1.0), "{difference}");
    }
}
