//! More asked for than can be computed: what cannot be done is refused at once and says when to come again, and whoever only looks is
//! answered as ever. `benches/overload.py` does the same for five minutes and measures it.

use std::sync::Arc;
use std::time::{Duration, Instant};

use serde_json::json;
use tokio::time::{interval, sleep};

use crate::harness::{COUNTS, Service, forecast_body, pairs};

const LATEST: &str = "/v1/networks/heronsgate/forecasts/latest";
/// A thing looked at is answered within this, on a machine that tests may have to share: measured at some milliseconds.
const AT_ONCE: Duration = Duration::from_secs(1);
const TIMES: u32 = 4;

async fn tracked() -> Arc<Service> {
    let service = Service::start_with(|config| {
        config.compute.queue = 4;
        config.compute.budget_seconds = 20;
    })
    .await;
    let plan =
        json!({"thresholds": [5, 10], "horizon": {"ends_after": "P3M", "every": "P1M"}, "arrivals": {"per_day": 50}});
    service
        .put("/v1/networks/heronsgate", &json!({"degree_kind": "received", "forecast_plan": plan}))
        .await
        .expect(201);
    let counts = json!({"degree_counts": pairs(&COUNTS[0])});
    service.put("/v1/networks/heronsgate/snapshots/2026-06-01", &counts).await.expect(201);
    while service.get(LATEST).await.header("forecast-state") != "current" {
        sleep(Duration::from_millis(50)).await;
    }
    Arc::new(service)
}

/// How long one computation takes when as many as there are workers are at work, about.
async fn usual(service: &Arc<Service>) -> Duration {
    let begun = Instant::now();
    let workers = std::thread::available_parallelism().map_or(1, usize::from);
    for _ in 0..3 {
        let asked: Vec<_> = (0..workers)
            .map(|_| {
                let service = service.clone();
                tokio::spawn(async move { service.post("/v1/forecasts", &forecast_body()).await.expect(201) })
            })
            .collect();
        for one in asked {
            one.await.unwrap();
        }
    }
    begun.elapsed() / (3 * workers as u32)
}

#[tokio::test(flavor = "multi_thread")]
async fn what_cannot_be_computed_is_refused_at_once_and_whoever_looks_is_answered() {
    let service = tracked().await;
    let every = usual(&service).await / TIMES;
    let end = Instant::now() + Duration::from_secs(4);
    let looking = tokio::spawn({
        let service = service.clone();
        async move {
            let mut looks = 0;
            while Instant::now() < end {
                for path in [LATEST, "/livez", "/readyz", "/metrics", "/v1/forecasts?limit=1"] {
                    let begun = Instant::now();
                    service.get(path).await.expect(200);
                    assert!(begun.elapsed() < AT_ONCE, "{path} after {:?}", begun.elapsed());
                    looks += 1;
                }
                sleep(Duration::from_millis(20)).await;
            }
            looks
        }
    });
    let (mut asked, mut due) = (Vec::new(), interval(every));
    while Instant::now() < end {
        due.tick().await;
        let service = service.clone();
        asked.push(tokio::spawn(async move { service.post("/v1/forecasts", &forecast_body()).await }));
    }
    assert!(looking.await.unwrap() > 20);
    let (mut made, mut refused) = (0, 0);
    for one in asked {
        let answer = one.await.unwrap();
        match answer.status {
            201 => made += 1,
            _ => {
                let answer = answer.expect_problem(503, "overloaded");
                let wait: u64 = answer.header("retry-after").parse().unwrap();
                assert!((1..=20).contains(&wait), "{wait}");
                refused += 1;
            }
        }
    }
    assert!(made > 0 && refused > made, "made {made}, refused {refused}");
    // As soon as less is asked for, all of it is done.
    for _ in 0..3 {
        service.post("/v1/forecasts", &forecast_body()).await.expect(201);
    }
}
