"""What writes while kills.py kills: mixed writes to networks of its own, and what of them must be found afterwards."""

import http.client
import json
import random
import threading
import time

LISTS = (300, 450)
DATES = [f"2026-{month:02}-01" for month in range(1, 4)]
HEADERS = {"json": {"content-type": "application/json"}, "csv": {"content-type": "text/csv"}}


class Replicas:
    """Asks one replica after another."""

    def __init__(self, ports):
        self.ports, self.turn, self.lock = ports, 0, threading.Lock()

    def next(self):
        with self.lock:
            self.turn += 1
            return self.ports[self.turn % len(self.ports)]

    def send(self, method, path, body=None, headers={}):
        """Status, headers and text of the answer; None when it cannot be told whether the request was done."""
        payload = body if body is None or isinstance(body, str) else json.dumps(body)
        headers = {"content-type": "application/json", **headers} if payload is not None else headers
        begun = time.monotonic()
        while time.monotonic() - begun < 60:
            connection = http.client.HTTPConnection("127.0.0.1", self.next(), timeout=40)
            try:
                connection.connect()
            except OSError:
                # Nothing was sent.
                time.sleep(0.02)
                continue
            try:
                connection.request(method, path, payload, headers)
                answer = connection.getresponse()
                return answer.status, answer.headers, answer.read().decode()
            except (OSError, http.client.HTTPException):
                return None
            finally:
                connection.close()
        raise SystemExit("no replica took a connection for 60 seconds")


def link_list(links):
    """A list in which each link brings a node: 30 a day, so that there is more than one month."""
    pick = random.Random(links)
    rows = [f"{1767225600 + 28800 * link},n{link + 1},n{pick.randrange(link + 1)}" for link in range(links)]
    return "time,source,target\n" + "\n".join(rows) + "\n"


def grown():
    """Degree counts at each date of an invented network in which newcomers link to three nodes, mostly those with many links."""
    pick = random.Random(7)
    ends, degrees, counts = list(range(10)), [1] * 10, []
    for place in range(len(DATES)):
        while len(degrees) < 150 + 100 * place:
            for _ in range(3):
                node = pick.choice(ends) if pick.random() < 0.7 else pick.randrange(len(degrees))
                degrees[node] += 1
                ends.append(node)
            degrees.append(0)
        table = {}
        for degree in degrees:
            table[degree] = table.get(degree, 0) + 1
        counts.append(table)
    return counts


GROWN = grown()


class Writer:
    """Writes to networks that nobody else writes to, so that what must be found is what it was told last."""

    def __init__(self, replicas, number, seed):
        self.replicas, self.number = replicas, number
        self.chance = random.Random(f"{seed}-{number}")
        self.name, self.stopped = f"heronsgate-{number}", threading.Event()
        # What may be found at a path: what was acknowledged last, then what was asked for since without an answer.
        self.possible = {}
        self.runs, self.gone, self.perhaps_gone, self.keys = {}, set(), set(), 0
        self.jobs, self.called_off = {}, set()
        self.trail, self.faults, self.told = [], [], {}

    def stop(self):
        self.stopped.set()

    def note(self, what):
        self.told[what] = self.told.get(what, 0) + 1

    def ask(self, method, path, body=None, headers={}, allowed=(), told_before=False):
        """The answer, where it tells what was done; None where that is not known."""
        answer = self.replicas.send(method, path, body, headers)
        if answer is None:
            self.note("writes cut off")
            return None
        status, told, text = answer
        if status < 300:
            self.note("writes acknowledged")
            # What the request before has done is in the trail under its own id.
            if not told_before:
                self.trail.append((told["x-request-id"], f"{method} {path}: {status}"))
        elif status >= 500:
            self.note(f"writes answered {status} {json.loads(text).get('code')}")
            if status != 503:
                self.faults.append(f"{method} {path}: {status} {text[:300]}")
            return None
        elif status not in allowed:
            self.faults.append(f"{method} {path}: {status} {text[:300]}")
        return answer

    def work(self):
        steps = [self.settings] * 2 + [self.snapshot] * 6 + [self.limit] * 3 + [self.scenario] * 2 + [self.run] * 6
        steps += [self.twice, self.remove_run, self.backtest, self.backtest, self.list, self.call_off, self.short_lived]
        self.settings()
        for date in range(len(DATES)):
            self.snapshot(date)
        while not self.stopped.is_set():
            self.chance.choice(steps)()
            time.sleep(self.chance.uniform(0, 0.1))

    def put(self, path, body, value, headers={}, allowed=(404,)):
        # Where it may stand there already nothing may be written, and nothing told in the trail.
        answer = self.ask("PUT", path, body, headers, allowed, told_before=value in self.possible.get(path, ()))
        if answer and answer[0] < 300:
            self.possible[path] = [value]
        elif answer is None:
            self.possible.setdefault(path, [None]).append(value)
        return answer

    def delete(self, path, below=()):
        answer = self.ask("DELETE", path, allowed=(404,))
        if answer is None:
            for each in (path, *below):
                self.possible.setdefault(each, [None]).append(None)
            return
        if answer[0] == 404 and None not in self.possible.get(path, [None]):
            self.faults.append(f"lost before its time: {path}, one of {str(self.possible[path])[:200]}")
        for each in (path, *below):
            self.possible[each] = [None]

    def settings(self, network=None):
        text = f"mark {self.chance.randrange(10**9)}"
        plan = {"thresholds": [5, 10], "horizon": {"ends_after": "P2M", "every": "P1M"}, "arrivals": {"per_day": 4.0}}
        body = {"degree_kind": "received", "description": text, "forecast_plan": plan}
        return self.put(f"/v1/networks/{network or self.name}", body, text)

    def snapshot(self, place=None, network=None):
        place = self.chance.randrange(len(DATES)) if place is None else place
        path = f"/v1/networks/{network or self.name}/snapshots/{DATES[place]}"
        if self.chance.random() < 0.15:
            return self.delete(path)
        table = dict(GROWN[place])
        table[0] = table.get(0, 0) + self.chance.randrange(40)
        text = "degree,nodes\n" + "".join(f"{degree},{nodes}\n" for degree, nodes in sorted(table.items()))
        return self.put(path, text, text, HEADERS["csv"])

    def limit(self):
        path = f"/v1/networks/{self.name}/limits/shards-{self.chance.randrange(3)}"
        if self.chance.random() < 0.2:
            return self.delete(path)
        most = self.chance.randrange(500, 10**6)
        return self.put(path, {"threshold": 10, "max_nodes": most, "by": "2026-11-01", "risk": 0.1}, most)

    def scenario(self):
        path = f"/v1/networks/{self.name}/scenarios/plan-{self.chance.randrange(3)}"
        if self.chance.random() < 0.2:
            return self.delete(path)
        factor = 1 + self.chance.randrange(1, 1000) / 1000
        return self.put(path, {"arrivals_factor": factor}, factor)

    def body_of_run(self, label):
        pairs = [[degree, nodes] for degree, nodes in sorted(GROWN[1].items())]
        body = {"degree_kind": "received", "snapshots": [{"as_of": DATES[1], "degree_counts": pairs}], "links_per_arrival": 3.0}
        body |= {"label": label, "fixed": {"preferential_share": 0.7}}
        if self.chance.random() < 0.5:
            return "/v1/fits", body
        return "/v1/forecasts", body | {"arrivals": {"per_day": 4.0}, "thresholds": [10], "dates": ["2026-06-01"]}

    def run(self):
        """A run by a key, asked for until it is answered."""
        self.keys += 1
        label = f"key-{self.number}-{self.keys}"
        path, body = self.body_of_run(label)
        for asked in range(200):
            answer = self.ask("POST", path, body, {"idempotency-key": label}, told_before=asked > 0)
            if answer:
                return self.keep_run(answer, label)
        self.faults.append(f"{label} was not answered 200 times")

    def keep_run(self, answer, label):
        status, headers, text = answer
        if status == 201:
            kept = self.runs.setdefault(headers["location"], text)
            if kept != text:
                self.faults.append(f"{label}: two answers for one run")

    def twice(self):
        """One key sent to two replicas at once."""
        self.keys += 1
        label, answers = f"key-{self.number}-{self.keys}", []
        path, body = self.body_of_run(label)
        send = lambda: answers.append(self.replicas.send("POST", path, body, {"idempotency-key": label}))
        threads = [threading.Thread(target=send) for _ in range(2)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        made = [answer for answer in answers if answer and answer[0] == 201]
        odd = [answer for answer in answers if answer and answer[0] not in (201, 409, 503)]
        self.faults += [f"{label}: {answer[0]} {answer[2][:200]}" for answer in odd]
        if len({answer[2] for answer in made}) > 1:
            self.faults.append(f"{label}: two runs of one key")
        for answer in made:
            self.keep_run(answer, label)
        self.note("keys sent to two at once")
        if len(made) == 2:
            self.note("keys sent to two at once, both answered")

    def remove_run(self):
        left = [path for path in self.runs if path not in self.gone and path not in self.perhaps_gone]
        if not left:
            return
        path = self.chance.choice(left)
        answer = self.ask("DELETE", path, allowed=(404,))
        if answer is None:
            self.perhaps_gone.add(path)
        elif answer[0] == 404:
            self.faults.append(f"lost before its time: {path}")
        else:
            self.gone.add(path)

    def backtest(self):
        self.take_on("POST", f"/v1/networks/{self.name}/backtests", {"thresholds": [5]}, {}, None)

    def list(self):
        links = self.chance.choice(LISTS)
        name = f"{self.name}-list"
        if f"/v1/networks/{name}" not in self.possible or None in self.possible[f"/v1/networks/{name}"]:
            self.settings(name)
        self.take_on("PUT", f"/v1/networks/{name}/links?every=P1M", link_list(links), HEADERS["csv"], links)

    def take_on(self, method, path, body, headers, links):
        # 409: the one before is at work; 422: not enough is stored.
        answer = self.ask(method, path, body, {**headers, "prefer": "respond-async"}, (404, 409, 422))
        if answer and answer[0] < 300:
            self.jobs[json.loads(answer[2])["id"]] = links

    def call_off(self):
        left = [job for job in list(self.jobs)[-3:] if job not in self.called_off]
        if left and self.chance.random() < 0.5:
            job = self.chance.choice(left)
            self.called_off.add(job)
            self.ask("DELETE", f"/v1/jobs/{job}", allowed=(404,))

    def short_lived(self):
        """A network that comes and goes with what hangs on it."""
        name = f"{self.name}-short"
        path, below = f"/v1/networks/{name}", f"/v1/networks/{name}/snapshots/{DATES[0]}"
        if self.chance.random() < 0.5:
            self.delete(path, (below,))
        else:
            self.settings(name)
            table = "degree,nodes\n0,90\n1,40\n2,20\n3,9\n5,4\n9,1\n"
            self.put(below, table, table, HEADERS["csv"])

    # Afterwards, with nothing killed any more.

    def read(self, path, headers={}):
        for _ in range(50):
            answer = self.replicas.send("GET", path, headers=headers)
            if answer and answer[0] != 503:
                return answer[0], answer[2]
            time.sleep(0.2)
        return 0, "not answered"

    def evidence(self, name):
        """Each snapshot of a network with its counts."""
        status, text = self.read(f"/v1/networks/{name}/snapshots?limit=200")
        dates = [line["as_of"] for line in json.loads(text)["items"]] if status == 200 else []
        return [(date, self.read(f"/v1/networks/{name}/snapshots/{date}", {"accept": "text/csv"})[1]) for date in sorted(dates)]

    def put_list_in_peace(self, name, links):
        self.replicas.send("PUT", f"/v1/networks/{name}", {"degree_kind": "received"})
        answer = self.replicas.send("PUT", f"/v1/networks/{name}/links?every=P1M", link_list(links), HEADERS["csv"])
        job = json.loads(answer[2]).get("id")
        for _ in range(300):
            if json.loads(self.read(f"/v1/jobs/{job}")[1]).get("state") not in ("waiting", "running"):
                break
            time.sleep(0.2)
        found = self.evidence(name)
        self.replicas.send("DELETE", f"/v1/networks/{name}")
        if len(found) < 2:
            self.faults.append(f"a list that nothing disturbed was not counted: {found}")
        return found

    def found(self, path):
        csv = "/snapshots/" in path
        status, text = self.read(path, {"accept": "text/csv"} if csv else {})
        if status == 404:
            return None
        if status != 200:
            return f"{status} {text[:200]}"
        if csv:
            return text.replace("\r\n", "\n")
        document = json.loads(text)
        if "/limits/" in path:
            return document["max_nodes"]
        return document["change"]["arrivals_factor"] if "/scenarios/" in path else document["description"]

    def compare(self, lists):
        """What is not as it was acknowledged."""
        faults = []
        for path, possible in self.possible.items():
            found = self.found(path)
            self.note("kept things held against what was acknowledged")
            if found not in possible:
                faults.append(f"{path}: {str(found)[:150]!r}, not one of {str(possible)[:300]}")
        for path, text in self.runs.items():
            status, found = self.read(path)
            self.note("runs held against their first answer, byte for byte")
            gone = path in self.gone
            right = (status == 404) if gone else (status == 200 and found == text)
            if not right and not (path in self.perhaps_gone and status == 404):
                faults.append(f"{path}: {status} where it is {'removed' if gone else 'kept'}")
        return faults + self.compare_jobs(lists)

    def compare_jobs(self, lists):
        faults, counted = [], []
        for job, links in self.jobs.items():
            status, text = self.read(f"/v1/jobs/{job}")
            self.note("jobs taken on and looked for")
            if status == 404 and job in self.called_off:
                continue
            state = json.loads(text).get("state") if status == 200 else status
            self.note(f"jobs taken on that {state}" if state != "failed" else f"jobs given up: {json.loads(text)['problem']['code']}")
            if state not in ("succeeded", "failed", "cancelled") or state == "cancelled" and job not in self.called_off:
                faults.append(f"job {job}: {state}")
            if state == "failed" and json.loads(text)["problem"]["code"] not in ("interrupted", "impossible"):
                faults.append(f"job {job}: {text[:300]}")
            if links and state == "succeeded":
                counted.append((job, links))
            if links is None and state == "succeeded" and self.read(f"/v1/backtests/{job}")[0] != 200:
                faults.append(f"job {job} succeeded, but its backtest is not there")
        found = self.evidence(f"{self.name}-list")
        if found and found not in lists.values():
            faults.append(f"{self.name}-list: evidence of no whole list, at {[date for date, _ in found]}")
        if counted and not found:
            faults.append(f"{self.name}-list: no evidence, though {len(counted)} lists were counted")
        return faults
