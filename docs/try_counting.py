"""Runs every query of docs/counting.md on made-up tables and holds its rows against a count in plain Python.

usage: python3 docs/try_counting.py [--accounts N] [--postgres URL]

SQLite comes with Python; DuckDB (PyPI `duckdb`) is tried where it is installed, PostgreSQL (by psql) where an address is given
(tests/postgres start FOLDER prints one). Ends with 1 when a row differs, or a query says another set of engines than were tried.
"""
import argparse, csv, io, pathlib, random, re, sqlite3, subprocess, sys
from collections import Counter

arguments = argparse.ArgumentParser()
arguments.add_argument("--accounts", type=int, default=3000)
arguments.add_argument("--postgres")
given = arguments.parse_args()

PAGE = pathlib.Path(__file__).with_name("counting.md").read_text()
SECTION = re.compile(r"\A(.+?)\n.*?```sql\n(.*?)```\n\nTried on (.*?)\.\n", re.S)
FOUND = [SECTION.search(section) for section in PAGE.split("\n## ")[1:]]
QUERIES = [(found[1], found[2].strip(), found[3].split(", ")) for found in FOUND if found]

# Heronsgate: accounts come and go from January to June 2026, older ones are linked to more, and some links end.
chance = random.Random(20260601)
day = lambda number: f"2026-{1 + number // 28:02d}-{1 + number % 28:02d} 00:00:00"
DAYS = 168
accounts, links = [], []
for number in range(given.accounts):
    arrived = number * DAYS // given.accounts
    departed = chance.randrange(arrived + 1, 2 * DAYS) if chance.random() < 0.2 else None
    accounts.append((f"a{number}", arrived, departed if departed is not None and departed < DAYS else None))
for number in range(3 * given.accounts):
    source, target = chance.randrange(given.accounts), int(given.accounts * chance.random() ** 3)
    made = max(accounts[source][1], accounts[target][1])
    made = chance.randrange(made, DAYS)
    ended = chance.randrange(made + 1, DAYS + 1) if chance.random() < 0.1 and made + 1 < DAYS else None
    links.append((accounts[source][0], accounts[target][0], made, ended))
    if chance.random() < 0.05:
        links.append(links[-1])

def present(row, at): return row[-2] <= at and (row[-1] is None or row[-1] > at)
def received(at):
    counted = Counter(link[1] for link in links if present(link, at))
    return {account[0]: counted[account[0]] for account in accounts if present(account, at)}
def histogram(degrees): return sorted(Counter(degrees).items())

MAY, JUNE = 4 * 28, 5 * 28
names = [account[0] for account in accounts]
targets = Counter(link[1] for link in links)
both = targets + Counter(link[0] for link in links)
distinct = Counter(target for source, target in {(link[0], link[1]) for link in links})
before, after = received(MAY), received(JUNE)
moves = Counter((before.get(name), after.get(name)) for name in before.keys() | after.keys())
EXPECTED = {
    "Links received": histogram(targets[name] for name in names),
    "Links received, without the join": histogram(targets[name] for name in names),
    "Links received, with no table of nodes": histogram(targets[name] for name in {end for link in links for end in link[:2]}),
    "Links received from distinct sources": histogram(distinct[name] for name in names),
    "Links in total": histogram(both[name] for name in names),
    "As of a date": histogram(after.values()),
    "Transitions between two dates": [(*move, nodes) for move, nodes in moves.items()],
}
assert [title for title, *_ in QUERIES] == list(EXPECTED), "the page's queries are not those that are known here"

dated = lambda rows: [(*row[:-2], day(row[-2]), None if row[-1] is None else day(row[-1])) for row in rows]
TABLES = {"accounts (name TEXT, arrived_at TIMESTAMP, departed_at TIMESTAMP)": dated(accounts),
          "links (source TEXT, target TEXT, made_at TIMESTAMP, ended_at TIMESTAMP)": dated(links)}

def by_python(connection):
    for table, rows in TABLES.items():
        connection.execute(f"CREATE TABLE {table}")
        cell = lambda value: "NULL" if value is None else f"'{value}'"
        lines = ", ".join(f"({', '.join(map(cell, row))})" for row in rows)
        connection.execute(f"INSERT INTO {table.split()[0]} VALUES {lines}")
    return lambda sql: connection.execute(sql).fetchall()

def by_psql(url):
    def ask(sql, rows=None):
        done = subprocess.run(["psql", url, "-qAXv", "ON_ERROR_STOP=1", "--csv", "-t", "-c", sql], input=rows, capture_output=True, text=True)
        if done.returncode: sys.exit(f"psql: {done.stderr}")
        return [tuple(value or None for value in row) for row in csv.reader(io.StringIO(done.stdout))]
    for table, rows in TABLES.items():
        name = table.split()[0]
        ask(f"DROP TABLE IF EXISTS {name}")
        ask(f"CREATE TABLE {table}")
        text = io.StringIO()
        csv.writer(text).writerows(rows)
        ask(f"COPY {name} FROM STDIN (FORMAT csv)", text.getvalue())
    return ask

engines = {"SQLite": (sqlite3.sqlite_version, by_python(sqlite3.connect(":memory:")))}
try:
    import duckdb
    engines["DuckDB"] = (duckdb.__version__, by_python(duckdb.connect()))
except ImportError:
    print("DuckDB is not installed: not tried")
if given.postgres:
    ask = by_psql(given.postgres)
    engines["PostgreSQL"] = (ask("SHOW server_version")[0][0].split()[0], ask)
else:
    print("no address of PostgreSQL is given: not tried")

wrong = 0
print(f"{len(accounts)} accounts, {len(links)} links; " + ", ".join(f"{name} {version}" for name, (version, _) in engines.items()))
whole = lambda rows: Counter(tuple(None if value is None else int(value) for value in row) for row in rows)
for title, sql, tried in QUERIES:
    for name, (_, ask) in sorted(engines.items()):
        found, wanted = whole(ask(sql)), whole(EXPECTED[title])
        same = found == wanted and name in tried
        wrong += not same
        print(f"{title:42} {name:10} {len(wanted):5} rows  {'as counted' if same else 'WRONG'}")
sys.exit(1 if wrong else 0)
