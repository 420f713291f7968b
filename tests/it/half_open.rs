//! Clients whose machine is gone without a word: in a network namespace of the test's own, whose one link is taken down and up again.

use std::process::Command;

use crate::process;

/// Follows a network's events by one connection, takes the link down for longer than the service waits, and tells how many connections the
/// service counts before and after, its own question included, and whether the client, which is still there, is told anything more.
const SCRIPT: &str = r#"
set -eu
ip link set lo up
"$SERVICE" serve 2>log &
service=$!
trap 'kill $service $client 2>/dev/null || true' EXIT
client=
until address=$(grep -o '127.0.0.1:[0-9]*' log); do sleep 0.1; done
ask() { curl -sS --noproxy '*' -m 10 "http://$address$1"; }
curl -sS --noproxy '*' -X PUT "http://$address/v1/networks/heronsgate" -H 'Content-Type: application/json' -d '{"degree_kind":"received"}' >answer
curl -sSN --noproxy '*' "http://$address/v1/networks/heronsgate/events" >events 2>/dev/null &
client=$!
connections() { ask /metrics | sed -n 's/^tailcast_http_connections //p'; }
sleep 2.5
[ -s events ] || { echo "no sign of life came"; exit 1; }
echo "before $(connections)"
ip link set lo down
sleep 8
ip link set lo up
sleep 1
told=$(wc -c <events)
sleep 3
echo "after $(connections)"
kill -0 $client && echo "client there"
[ "$told" = "$(wc -c <events)" ] && echo "told nothing more"
"#;

#[test]
fn a_client_whose_machine_is_gone_is_let_go_while_it_still_thinks_itself_connected() {
    let namespace = ["--net", "--map-root-user"];
    let possible = Command::new("unshare").args(namespace).args(["ip", "link", "set", "lo", "up"]).output();
    if !possible.is_ok_and(|output| output.status.success()) {
        eprintln!("not run: this machine does not let tests have a network namespace, or lacks unshare or ip");
        return;
    }
    let folder = tempfile::tempdir().unwrap();
    let command = process::command(folder.path());
    let variables = [
        ("TAILCAST_BIND", "127.0.0.1:0"),
        ("TAILCAST_LOG_FILTER", "warn,tailcast::app=info"),
        ("TAILCAST_HTTP_ANSWER_PAUSE_SECONDS", "2"),
        ("TAILCAST_HTTP_STREAM_KEEP_ALIVE_SECONDS", "1"),
        ("SERVICE", command.get_program().to_str().unwrap()),
    ]
    .map(|(name, value)| (name, value.to_owned()));
    let mut inside = Command::new("unshare");
    inside.args(namespace).args(["timeout", "60", "bash", "-c", SCRIPT]).current_dir(folder.path()).envs(variables);
    for (name, _) in command.get_envs().filter(|(_, value)| value.is_none()) {
        inside.env_remove(name);
    }
    let output = inside.output().unwrap();
    let told = String::from_utf8_lossy(&output.stdout);
    let lines: Vec<&str> = told.lines().collect();
    assert_eq!(
        lines,
        ["before 2", "after 1", "client there", "told nothing more"],
        "{}",
        String::from_utf8_lossy(&output.stderr)
    );
}
