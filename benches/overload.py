#!/usr/bin/env python3
"""Four times the load that the service can carry, for five minutes: what is answered, how long polls take, how much memory it takes.

usage: SERVICE_BINARY=target/release/tailcast python3 benches/overload.py [seconds of overload, 300 when left out]

The service is the binary with its default settings, the loopback address and a database in a temporary folder. Load comes from this process over
kept connections, at most 400; polls come from a process of their own, 50 a second for a network's latest forecast and one each of
/livez, /readyz and /metrics, so that their times are not those of the load's own queue. Both share the machine's cores with the service.

1. calm: polls alone. 2. carried: as many clients as twice the cores ask one after another; what they are answered a second
is what the service can carry. 3. overload: four times as many requests a second as that, on a fixed schedule that does not wait
for answers; what is refused is not asked again. 4. rest: polls alone again.

The mix: 70 % POST /v1/forecasts, 10 % a snapshot PUT to one of five tracked networks, each followed by a refresh, 10 % lists of
forecasts, 10 % snapshots read.
"""

import asyncio
import collections
import json
import multiprocessing
import os
import random
import re
import resource
import subprocess
import sys
import tempfile
import time

BINARY = os.environ.get("SERVICE_BINARY", "target/release/tailcast")
SECONDS = float(sys.argv[1]) if len(sys.argv) > 1 else 300.0
CALM, CARRIED, REST = (60.0, 30.0, 60.0) if SECONDS >= 60 else (SECONDS, SECONDS, SECONDS)
CONNECTIONS, POLLS_A_SECOND, TIMES = 400, 50, 4
NETWORKS = ["heronsgate", "heronsgate-north", "heronsgate-east", "heronsgate-south", "heronsgate-west"]
PLAN = {"thresholds": [5, 10, 20, 50], "horizon": {"ends_after": "P3M", "every": "P1M"}, "arrivals": {"per_day": 40}}


def counts(nodes, more):
    """A broad law of degrees: a share of 1 / ((k + 1)(k + 2)) of the nodes has k links."""
    pairs = [[k, int(nodes / ((k + 1) * (k + 2)))] for k in range(200)]
    pairs[0][1] += more
    return [pair for pair in pairs if pair[1] > 0]


FORECAST = {
    "degree_kind": "received", "snapshots": [{"as_of": "2026-06-01", "degree_counts": counts(5_000, 0)}],
    "arrivals": {"per_day": 50.0}, "links_per_arrival": 1.0, "thresholds": [10, 50, 100],
    "dates": ["2026-07-01", "2026-09-01", "2026-12-01"],
}


def request(method, path, body=None):
    text = json.dumps(body).encode() if body is not None else b""
    head = f"{method} {path} HTTP/1.1\r\nhost: localhost\r\ncontent-type: application/json\r\ncontent-length: {len(text)}\r\n\r\n"
    return head.encode() + text


def mixed(randomness, count):
    draw = randomness.random()
    if draw < 0.7:
        return "POST forecast", request("POST", "/v1/forecasts", FORECAST)
    if draw < 0.8:
        path = f"/v1/networks/{randomness.choice(NETWORKS)}/snapshots/2026-06-01"
        return "PUT snapshot", request("PUT", path, {"degree_counts": counts(5_000, count)})
    if draw < 0.9:
        return "GET list", request("GET", "/v1/forecasts?limit=20")
    return "GET snapshot", request("GET", f"/v1/networks/{randomness.choice(NETWORKS)}/snapshots/2026-05-01")


class Connection:
    """A kept connection, opened anew where the service closed it."""

    def __init__(self, port):
        self.port, self.reader, self.writer = port, None, None

    async def ask(self, data):
        for attempt in (1, 2):
            kept = self.reader is not None
            try:
                if not kept:
                    self.reader, self.writer = await asyncio.open_connection("127.0.0.1", self.port)
                self.writer.write(data)
                head = (await self.reader.readuntil(b"\r\n\r\n")).decode()
                length = re.search(r"content-length: (\d+)", head)
                body = await self.reader.readexactly(int(length[1])) if length else b""
                if "connection: close" in head:
                    self.close()
                return int(head[9:12]), head, body
            except (OSError, asyncio.IncompleteReadError) as error:
                self.close()
                # A connection that rested may be closed at any time; any other is a failure.
                if not kept or attempt == 2:
                    return 0, repr(error), b""

    def close(self):
        if self.writer:
            self.writer.close()
        self.reader = self.writer = None


def polling(port, phases, told):
    """Polls at a steady pace; (kind, seconds, status) of each, by phase."""

    async def run():
        found = collections.defaultdict(list)
        latest = Connection(port)
        others = Connection(port)

        async def ask(connection, kind, path):
            begun = time.perf_counter()
            status, _, _ = await connection.ask(request("GET", path))
            found[phases.value].append((kind, time.perf_counter() - begun, status))

        async def probes():
            while phases.value >= 0:
                for path in ("/livez", "/readyz", "/metrics"):
                    await ask(others, path, path)
                await asyncio.sleep(1)

        probing = asyncio.create_task(probes())
        due = time.perf_counter()
        while phases.value >= 0:
            await ask(latest, "latest forecast", f"/v1/networks/{NETWORKS[0]}/forecasts/latest")
            due = max(due + 1 / POLLS_A_SECOND, time.perf_counter())
            await asyncio.sleep(max(0.0, due - time.perf_counter()))
        await probing
        return dict(found)

    told.put(asyncio.run(run()))


def memory(pid, name="VmRSS"):
    text = open(f"/proc/{pid}/status").read()
    return int(re.search(rf"{name}:\s+(\d+)", text)[1]) / 1024


def processor(pid):
    fields = open(f"/proc/{pid}/stat").read().rsplit(")", 1)[1].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def quantile(values, share):
    values = sorted(values)
    return values[min(len(values) - 1, int(share * len(values)))] if values else float("nan")


async def prepare(port):
    connection = Connection(port)
    for name in NETWORKS:
        path = f"/v1/networks/{name}"
        await connection.ask(request("PUT", path, {"degree_kind": "received", "forecast_plan": PLAN}))
        for day, more in (("2026-05-01", 0), ("2026-06-01", 500)):
            await connection.ask(request("PUT", f"{path}/snapshots/{day}", {"degree_counts": counts(4_500 + more, more)}))
    for name in NETWORKS:
        while "forecast-state: current" not in (await connection.ask(request("GET", f"/v1/networks/{name}/forecasts/latest")))[1]:
            await asyncio.sleep(0.2)
    connection.close()


async def carried(port, seconds):
    """One request after another from each of a few clients; answered a second, and statuses."""
    statuses, end = collections.Counter(), time.perf_counter() + seconds

    async def client(seed):
        connection, randomness, count = Connection(port), random.Random(seed), 0
        while time.perf_counter() < end:
            count += 1
            kind, data = mixed(randomness, seed * 1000 + count)
            statuses[(kind, (await connection.ask(data))[0])] += 1
        connection.close()

    await asyncio.gather(*(client(seed) for seed in range(2 * (os.cpu_count() or 1))))
    return sum(statuses.values()) / seconds, statuses


async def overload(port, rate, seconds):
    """Requests on a schedule of their own; statuses, times of each kind, Retry-After told, and how many found no free connection."""
    statuses, times, waits, missed = collections.Counter(), collections.defaultdict(list), [], 0
    free = [Connection(port) for _ in range(CONNECTIONS)]
    every, randomness, under_way = list(free), random.Random(1), set()

    async def one(connection, kind, data):
        begun = time.perf_counter()
        status, head, _ = await connection.ask(data)
        statuses[(kind, status)] += 1
        times[(kind, status)].append(time.perf_counter() - begun)
        if status == 503:
            waits.append(int(re.search(r"retry-after: (\d+)", head)[1]))
        free.append(connection)

    begun = time.perf_counter()
    for count in range(int(rate * seconds)):
        await asyncio.sleep(max(0.0, begun + count / rate - time.perf_counter()))
        kind, data = mixed(randomness, 1_000_000 + count)
        if not free:
            missed += 1
            continue
        task = asyncio.create_task(one(free.pop(), kind, data))
        under_way.add(task)
        task.add_done_callback(under_way.discard)
    took = time.perf_counter() - begun
    await asyncio.gather(*under_way)
    for connection in every:
        connection.close()
    return statuses, times, waits, missed, took


def tell(statuses, indent="    "):
    for kind in sorted({kind for kind, _ in statuses}):
        line = ", ".join(f"{status}: {count}" for (of, status), count in sorted(statuses.items()) if of == kind)
        print(f"{indent}{kind:14} {line}")


def main():
    with tempfile.TemporaryDirectory() as folder:
        settings = {"TAILCAST_BIND": "127.0.0.1:0", "TAILCAST_DATABASE_URL": f"sqlite://{folder}/bench.db",
                    "TAILCAST_LOG_FILTER": "error,tailcast::app=info"}
        service = subprocess.Popen([BINARY, "serve"], env={**os.environ, **settings}, stderr=subprocess.PIPE, text=True)
        phases, told = multiprocessing.Value("i", 0), multiprocessing.Queue()
        poller = None
        try:
            line = next(line for line in service.stderr if "serving address=" in line)
            port = int(re.search(r"address=[\d.]+:(\d+)", line)[1])
            faults = []
            import threading
            threading.Thread(target=lambda: faults.extend(service.stderr), daemon=True).start()
            asyncio.run(prepare(port))
            poller = multiprocessing.Process(target=polling, args=(port, phases, told), daemon=True)
            poller.start()
            samples = []

            def sample():
                begun = time.perf_counter()
                while phases.value >= 0:
                    samples.append((phases.value, time.perf_counter() - begun, memory(service.pid)))
                    time.sleep(1)

            sampler = threading.Thread(target=sample)
            sampler.start()
            time.sleep(CALM)
            phases.value = 1
            rate, statuses = asyncio.run(carried(port, CARRIED))
            phases.value = 2
            before, own = processor(service.pid), resource.getrusage(resource.RUSAGE_SELF)
            of_load, times, waits, missed, took = asyncio.run(overload(port, TIMES * rate, SECONDS))
            busy = (processor(service.pid) - before) / took
            after = resource.getrusage(resource.RUSAGE_SELF)
            client = (after.ru_utime + after.ru_stime - own.ru_utime - own.ru_stime) / took
            phases.value = 3
            time.sleep(REST)
            phases.value = 4
            again, statuses_again = asyncio.run(carried(port, CARRIED))
            phases.value = -1
            polls = told.get(timeout=30)
            sampler.join()
            report(rate, statuses, of_load, times, waits, missed, took, busy, client, again, statuses_again, polls, samples, faults)
        finally:
            phases.value = -1
            service.terminate()
            service.wait(60)


def report(rate, statuses, of_load, times, waits, missed, took, busy, client, again, statuses_again, polls, samples, faults):
    cores = os.cpu_count()
    load = "/".join(f"{x:.1f}" for x in os.getloadavg())
    print(f"service: {BINARY}, {cores} cores, load averages at the end {load}")
    print(f"carried: {rate:.1f} requests a second by {2 * cores} clients, of them "
          f"{statuses[('POST forecast', 201)] / CARRIED:.1f} forecasts")
    tell(statuses)
    offered = sum(of_load.values()) + missed
    print(f"offered: {offered / took:.1f} a second for {took:.0f} s, {offered / took / rate:.1f} times that; {missed} found none of "
          f"{CONNECTIONS} connections free")
    tell(of_load)
    for (kind, status), values in sorted(times.items()):
        print(f"    {kind:14} {status}  p50 {1e3 * quantile(values, 0.5):8.1f} ms   p99 {1e3 * quantile(values, 0.99):8.1f} ms")
    if waits:
        print(f"    Retry-After: {min(waits)} to {max(waits)} s, median {quantile(waits, 0.5)}")
    served = sum(count for (kind, status), count in of_load.items() if 200 <= status < 300) / took
    print(f"    served {served:.1f} a second, of them {of_load[('POST forecast', 201)] / took:.1f} forecasts; processors: service "
          f"{busy:.2f}, load {client:.2f}")
    names = {0: "calm", 1: "carried", 2: "overload", 3: "rest", 4: "carried again"}
    print("polls, 50 a second:")
    calm = None
    for phase, name in names.items():
        found = polls.get(phase, [])
        values = [seconds for kind, seconds, _ in found if kind == "latest forecast"]
        p50, p99 = quantile(values, 0.5), quantile(values, 0.99)
        calm = calm or p99
        print(f"    {name:14} p50 {1e3 * p50:7.2f} ms   p99 {1e3 * p99:7.2f} ms   {p99 / calm:5.2f} of calm   "
              f"statuses {dict(collections.Counter(status for kind, _, status in found if kind == 'latest forecast'))}")
    for path in ("/livez", "/readyz", "/metrics"):
        found = [(seconds, status) for kind, seconds, status in polls.get(2, []) if kind == path]
        values = [seconds for seconds, _ in found]
        print(f"    {path:9} under overload: slowest of {len(values)} {1e3 * max(values, default=float('nan')):.1f} ms, statuses "
              f"{dict(collections.Counter(status for _, status in found))}")
    print("memory, MiB:")
    for phase, name in names.items():
        values = [mib for of, _, mib in samples if of == phase]
        if values:
            print(f"    {name:14} first {values[0]:6.0f}   most {max(values):6.0f}   last {values[-1]:6.0f}")
    minute = [mib for of, _, mib in samples if of == 2][::30]
    print("    overload, every 30 s: " + " ".join(f"{mib:.0f}" for mib in minute))
    print(f"carried again after the rest: {again:.1f} requests a second ({again / rate:.2f} of before)")
    tell(statuses_again)
    print(f"lines logged as errors: {len([line for line in faults if 'ERROR' in line])}")


if __name__ == "__main__":
    main()
