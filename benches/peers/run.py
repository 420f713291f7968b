"""The engine beside its peers in one run, as ratios: simulation beside igraph's growth by the same kernel and beside a loop that only
reads and writes; a forecast and a fit beside the same computation in numpy and scipy.

usage: python3 benches/peers/run.py [--rounds N] [--output FILE]

Makes a virtual environment in target/peers with the peers from the package index, builds `benches/forecast.rs`, and lets all take
turns. One thread each. Answers are held against each other before any time is told.
"""

import argparse
import json
import os
import pathlib
import platform
import statistics
import subprocess
import sys
import time
import venv

ROOT = pathlib.Path(__file__).resolve().parents[2]
PLACE = pathlib.Path(os.environ.get("CARGO_TARGET_DIR", ROOT / "target")) / "peers"
PEERS = ["numpy==2.4.6", "scipy==1.17.1", "igraph==1.0.0"]
QUICK = 20
"""Runs a round of what takes milliseconds; the round's time is their median."""
NODES, LINKS, SHARE = 1_000_000, 3, 0.8
THRESHOLDS = [10, 100, 1_000, 5_000, 10_000]
AGREEMENT = 1e-6


def within_the_environment():
    """Starts anew in an environment that has the peers."""
    python = PLACE / "bin" / "python"
    if pathlib.Path(sys.prefix) == PLACE:
        return
    if not python.exists():
        venv.create(PLACE, with_pip=True)
    subprocess.run([python, "-m", "pip", "install", "--quiet", *PEERS], check=True)
    limits = {f"{library}_NUM_THREADS": "1" for library in ("OMP", "OPENBLAS", "MKL")}
    os.execve(python, [python, *sys.argv], os.environ | limits)


class Engine:
    """The program's side, told what to do a line at a time."""

    def __init__(self):
        build = ["cargo", "bench", "--locked", "--bench", "forecast", "--no-default-features", "--no-run"]
        told = subprocess.run([*build, "--message-format=json"], cwd=ROOT, check=True, stdout=subprocess.PIPE, text=True)
        messages = (json.loads(line) for line in told.stdout.splitlines() if line.startswith("{"))
        made = [m["executable"] for m in messages if m.get("executable") and m["target"]["name"] == "forecast"]
        self.process = subprocess.Popen([made[-1], "turns"], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)

    def do(self, what):
        self.process.stdin.write(what + "\n")
        self.process.stdin.flush()
        answer = json.loads(self.process.stdout.readline())
        return answer["seconds"], answer["answer"]

    def quick(self, what):
        runs = [self.do(what) for _ in range(QUICK)]
        return statistics.median(seconds for seconds, _ in runs), runs[-1][1]


def timed(work):
    start = time.perf_counter()
    result = work()
    return time.perf_counter() - start, result


def differences(ours, theirs):
    """The largest relative difference of expectations and estimates, and of whole-number quantiles."""
    exact = [abs(ours["fit"][name] / theirs["fit"][name] - 1) for name in ("share", "low", "high")]
    whole = []
    for mine, other in zip(ours["dates"], theirs["dates"], strict=True):
        rows = list(zip([*mine["tail"], mine["nodes"], mine["links"]], [*other["tail"], other["nodes"], other["links"]], strict=True))
        exact += [abs(a["expected"] / b["expected"] - 1) for a, b in rows]
        for a, b in [*rows, (mine["largest"], other["largest"])]:
            ends = zip([a["median"], *sum(a["intervals"], [])], [b["median"], *sum(b["intervals"], [])], strict=True)
            whole += [max(abs(x - y) - 1, 0) / y for x, y in ends if x != y]
    return max(exact), max(whole, default=0.0)


def main():
    asked = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    asked.add_argument("--rounds", type=int, default=5)
    asked.add_argument("--output", type=pathlib.Path, help="the table goes there as well")
    asked = asked.parse_args()
    within_the_environment()

    import igraph
    import numpy
    import numpy_forecast
    import scipy

    engine = Engine()
    pairs = numpy.array(engine.do("network")[1]["pairs"])
    degrees, nodes = pairs[:, 0], pairs[:, 1]
    rate, days = float(nodes.sum()) / 1_000, 30.0 * numpy.arange(1, 13)

    def grow():
        return igraph.Graph.Barabasi(
            NODES, m=LINKS, directed=True, outpref=False, power=1, zero_appeal=LINKS * (1 - SHARE) / SHARE, implementation="psumtree"
        ).ecount()

    work = {
        "forecast, tailcast": lambda: engine.quick("forecast"),
        "forecast, numpy": lambda: timed(lambda: numpy_forecast.forecast(degrees, nodes, rate, days, THRESHOLDS)),
        "fit, tailcast": lambda: engine.quick("fit"),
        "fit, scipy": lambda: timed(lambda: numpy_forecast.fit(degrees.astype(float), nodes)),
        "simulation, tailcast": lambda: engine.do("simulate"),
        "simulation, igraph": lambda: timed(grow),
        "reads and writes": lambda: engine.do("touch"),
    }
    times, answers = {name: [] for name in work}, {}
    for _ in range(asked.rounds):
        for name, act in work.items():
            seconds, answers[name] = act()
            times[name].append(seconds)
    exact, whole = differences(answers["forecast, tailcast"], answers["forecast, numpy"])
    assert exact < AGREEMENT, f"expectations differ by {exact}"
    assert whole < 1e-4, f"quantiles differ by {whole}"

    median = {name: statistics.median(seconds) for name, seconds in times.items()}
    lines = [
        f"{len(degrees)} distinct degrees, {int(nodes.sum())} nodes, {len(days)} dates, {len(THRESHOLDS)} thresholds, 2 levels; medians of "
        f"{asked.rounds} rounds",
        f"numpy {numpy.__version__}, scipy {scipy.__version__}, igraph {igraph.__version__}, Python {platform.python_version()}",
        f"answers: expectations, estimates and their intervals within {exact:.1e} of numpy's; medians and ends of intervals of counts within a node",
        "or 1e-4",
        "",
        *(f"{name:24}{1e3 * seconds:12.2f} ms" for name, seconds in median.items()),
        "",
    ]

    def ratio(what, slow, quick, least):
        lines.append(f"{what:70}{median[slow] / median[quick]:10.1f}   wanted: {least}")

    ratio("forecast: numpy and scipy over tailcast", "forecast, numpy", "forecast, tailcast", "20")
    ratio("one simulation of 10^6 nodes by igraph over one forecast", "simulation, igraph", "forecast, tailcast", "1000")
    ratio("fit: scipy over tailcast", "fit, scipy", "fit, tailcast", "10")
    ratio("simulation of 10^6 nodes, 3 links each: igraph over tailcast", "simulation, igraph", "simulation, tailcast", "15")
    ratio("simulation over as many random reads and writes", "simulation, tailcast", "reads and writes", "at most 3")
    lines.append(f"links simulated a second: {NODES * LINKS / median['simulation, tailcast'] / 1e6:.1f} million")
    print(*lines, sep="\n")
    if asked.output:
        asked.output.write_text("\n".join(["$ python3 benches/peers/run.py", *lines]) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
