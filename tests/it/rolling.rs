//! A rolling restart: two processes of one PostgreSQL database are started anew in turn by SIGTERM while clients ask, and no request is
//! lost, neither by a client that follows /readyz nor by one that only goes on to the next process where nobody listens.

use std::net::SocketAddr;
use std::path::Path;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex};
use std::time::{Duration, Instant};

use reqwest::Client;
use serde_json::{Value, json};

use crate::harness::{changed, fit_body, forecast_body};
use crate::postgres::Server;
use crate::process::{Served, serve_with};

/// Time between two looks at /readyz: a third of `http.drain_seconds`.
const LOOK_EVERY: Duration = Duration::from_millis(330);

/// What clients share.
struct Scene {
    addresses: [SocketAddr; 2],
    ready: [AtomicBool; 2],
    over: AtomicBool,
    /// Ids of what was acknowledged, and what went wrong.
    kept: Mutex<Vec<String>>,
    faults: Mutex<Vec<String>>,
}

impl Scene {
    fn is_over(&self) -> bool {
        self.over.load(Ordering::Relaxed)
    }

    /// Looks at a process's /readyz for as long as the test lasts.
    async fn look(self: Arc<Self>, which: usize) {
        let client = client();
        while !self.is_over() {
            let answer = client.get(self.url(which, "/readyz")).send().await;
            let ready = answer.is_ok_and(|answer| answer.status() == 200);
            self.ready[which].store(ready, Ordering::Relaxed);
            tokio::time::sleep(LOOK_EVERY).await;
        }
    }

    fn url(&self, which: usize, path: &str) -> String {
        format!("http://{}{path}", self.addresses[which])
    }

    /// Asks in turn those that were ready when last looked at, over connections that are kept.
    async fn follow(self: Arc<Self>, number: usize) {
        let client = client();
        for round in number.. {
            if self.is_over() {
                return;
            }
            let turns = [round % 2, (round + 1) % 2];
            let Some(which) = turns.into_iter().find(|&which| self.ready[which].load(Ordering::Relaxed)) else {
                self.fault(format!("nobody was ready in round {round}"));
                return;
            };
            let answer = self.ask(&client, which, round).await;
            self.note(round, answer.map_err(|error| format!("{error:?}")));
            tokio::time::sleep(Duration::from_millis(20)).await;
        }
    }

    /// Asks in turn all, each time over a new connection, and the other one where nobody listens.
    async fn knock(self: Arc<Self>, number: usize) {
        for round in number.. {
            if self.is_over() {
                return;
            }
            let mut answer = self.ask(&client(), round % 2, round).await;
            if answer.as_ref().is_err_and(reqwest::Error::is_connect) {
                answer = self.ask(&client(), (round + 1) % 2, round).await;
            }
            self.note(round, answer.map_err(|error| format!("{error:?}")));
            tokio::time::sleep(Duration::from_millis(20)).await;
        }
    }

    /// A read, or a fit or a forecast that is kept.
    async fn ask(&self, client: &Client, which: usize, round: usize) -> reqwest::Result<(u16, String)> {
        let fit = changed(fit_body(), "/fixed", json!({"preferential_share": 0.7}));
        let request = match round % 5 {
            0 => client.post(self.url(which, "/v1/fits")).body(fit.to_string()),
            1 => client.post(self.url(which, "/v1/forecasts")).body(forecast_body().to_string()),
            _ => client.get(self.url(which, "/v1/networks")),
        };
        let answer = request.header("content-type", "application/json").send().await?;
        Ok((answer.status().as_u16(), answer.text().await?))
    }

    fn note(&self, round: usize, answer: Result<(u16, String), String>) {
        match answer {
            Ok((201, text)) => {
                let run: Value = serde_json::from_str(&text).unwrap();
                let kind = if round.is_multiple_of(5) { "fits" } else { "forecasts" };
                self.kept.lock().unwrap().push(format!("/v1/{kind}/{}", run["id"].as_str().unwrap()));
            }
            Ok((200, _)) => {}
            other => self.fault(format!("round {round}: {other:?}")),
        }
    }

    fn fault(&self, fault: String) {
        self.faults.lock().unwrap().push(fault);
    }
}

fn client() -> Client {
    Client::builder().no_proxy().timeout(Duration::from_secs(60)).build().unwrap()
}

fn serve(folder: &Path, database: &str, bind: &str) -> Served {
    let more = [("TAILCAST_DATABASE_URL", database), ("TAILCAST_BIND", bind), ("TAILCAST_HTTP_DRAIN_SECONDS", "1")];
    serve_with(folder, &more)
}

/// Waits until a process was found to be ready, or not to be.
async fn seen(scene: &Scene, which: usize, ready: bool) {
    let begun = Instant::now();
    while scene.ready[which].load(Ordering::Relaxed) != ready {
        assert!(begun.elapsed() < Duration::from_secs(30), "{which} ready: {}", !ready);
        tokio::time::sleep(Duration::from_millis(10)).await;
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn no_request_is_lost_while_two_processes_are_started_anew_in_turn() {
    let Some(server) = Server::given_or_own() else { return };
    let database = server.fresh().await;
    let folder = tempfile::tempdir().unwrap();
    // At the same time: one makes the tables, and the other waits for them.
    let mut processes = std::thread::scope(|scope| {
        let start = || scope.spawn(|| Some(serve(folder.path(), &database, "127.0.0.1:0")));
        [start(), start()].map(|started| started.join().unwrap())
    });
    let addresses = processes.each_ref().map(|served| served.as_ref().unwrap().address);
    let scene = Arc::new(Scene {
        addresses,
        ready: Default::default(),
        over: AtomicBool::new(false),
        kept: Mutex::default(),
        faults: Mutex::default(),
    });
    let mut tasks = vec![tokio::spawn(scene.clone().look(0)), tokio::spawn(scene.clone().look(1))];
    seen(&scene, 0, true).await;
    seen(&scene, 1, true).await;
    tasks.extend([0, 1, 2].map(|number| tokio::spawn(scene.clone().follow(number))));
    tasks.extend([0, 1].map(|number| tokio::spawn(scene.clone().knock(number))));

    for which in [0, 1, 0, 1] {
        let stopping = processes[which].take().unwrap();
        stopping.ask_to_stop();
        seen(&scene, which, false).await;
        // It serves on, says why it is not ready, and has clients connect anew.
        let told = client().get(scene.url(which, "/readyz")).send().await.unwrap();
        assert_eq!((told.status().as_u16(), &told.headers()["connection"]), (503, &"close".parse().unwrap()));
        assert_eq!(told.json::<Value>().await.unwrap()["code"], "stopping");
        let log = tokio::task::spawn_blocking(|| stopping.ended()).await.unwrap();
        assert!(log.iter().all(|line| !line.contains("not finished in time")), "{log:?}");
        let bind = addresses[which].to_string();
        processes[which] = Some(serve(folder.path(), &database, &bind));
        seen(&scene, which, true).await;
    }
    scene.over.store(true, Ordering::Relaxed);
    for task in tasks {
        task.await.unwrap();
    }
    assert_eq!(*scene.faults.lock().unwrap(), Vec::<String>::new());
    let kept = std::mem::take(&mut *scene.kept.lock().unwrap());
    assert!(kept.len() > 20, "{} writes", kept.len());
    for (number, run) in kept.iter().enumerate() {
        let answer = client().get(scene.url(number % 2, run)).send().await.unwrap();
        assert_eq!(answer.status(), 200, "{run} was acknowledged");
    }
}
