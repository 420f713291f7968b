"""Grows an invented network, Heronsgate, and writes its degree counts on the first of each month of 2026 beside this file.

Each day 40 accounts join; with each come three follows that land on accounts present before, seven in ten of them in
proportion to the followers an account has, the rest on any account alike. Python's own generator, seed 7.
"""

import random
from collections import Counter
from datetime import date
from pathlib import Path

DAYS_BEFORE = 90
random.seed(7)
folder = Path(__file__).parent / "heronsgate"
folder.mkdir(exist_ok=True)

followers = [0] * 20
ends = []  # one entry a follow: whom it landed on
first = date(2026, 1, 1)
for month in range(1, 9):
    until = (date(2026, month, 1) - first).days + DAYS_BEFORE
    begun = 0 if month == 1 else (date(2026, month - 1, 1) - first).days + DAYS_BEFORE
    for _ in range(40 * (until - begun)):
        for _ in range(3):
            by_followers = ends and random.random() < 0.7
            whom = random.choice(ends) if by_followers else random.randrange(len(followers))
            followers[whom] += 1
            ends.append(whom)
        followers.append(0)
    counts = sorted(Counter(followers).items())
    lines = ["degree,nodes"] + [f"{degree},{nodes}" for degree, nodes in counts]
    (folder / f"2026-{month:02}-01.csv").write_text("\n".join(lines) + "\n")
