//! More asked for than can be computed: what cannot be done is refused at once and says when to come again, and whoever only looks is
//! answered as ever. `benches/overload.py` does the same for five minutes and measures it.

use std::sync::Arc;
use std::time::{Duration, Instant};

use serde_json::json;
use tokio::time::sleep;

use crate::harness::{COUNTS, Service, forecast_body, pairs};

const LATEST: &str = "/v1/networks/heronsgate/forecasts/latest";
/// A thing looked at is answered within this, on a machine that tests may have to share: measured at some milliseconds.
const AT_ONCE: Duration = Duration::from_secs(1);
/// So many ask again and again at once: over four times the places, whatever a machine's speed.
const ASKING: usize = 64;
const PLACES: usize = 4;

async fn tracked() -> Arc<Service> {
    let service = Service::start_with(|config| {
        config.compute.queue = PLACES;
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

#[tokio::test(flavor = "multi_thread")]
async fn what_cannot_be_computed_is_refused_at_once_and_whoever_looks_is_answered() {
    let service = tracked().await;
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
    let ask = |service: Arc<Service>| async move {
        let (mut made, mut refused) = (0, 0);
        while Instant::now() < end {
            let answer = service.post("/v1/forecasts", &forecast_body()).await;
            if answer.status == 201 {
                made += 1;
                continue;
            }
            let answer = answer.expect_problem(503, "overloaded");
            let wait: u64 = answer.header("retry-after").parse().unwrap();
            assert!((1..=20).contains(&wait), "{wait}");
            refused += 1;
            sleep(Duration::from_millis(100)).await;
        }
        (made, refused)
    };
    let asking: Vec<_> = (0..ASKING).map(|_| tokio::spawn(ask(service.clone()))).collect();
    let (mut made, mut refused) = (0, 0);
    for one in asking {
        let (one_made, one_refused) = one.await.unwrap();
        made += one_made;
        refused += one_refused;
    }
    assert!(looking.await.unwrap() > 20);
    assert!(made > 0 && refused > 0, "made {made}, refused {refused}");
    // As soon as less is asked for, all of it is done.
    for _ in 0..3 {
        service.post("/v1/forecasts", &forecast_body()).await.expect(201);
    }
}
