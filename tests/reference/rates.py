#!/usr/bin/env python3
"""Reference values of a filtered damped trend, computed apart from the engine.

usage: rates.py

Writes rates.csv beside this script: level, trend, their variances and the log-likelihood (without its constant) of
ln(events / exposure) after a history of evenly spaced periods, by filterpy's Kalman filter with the matrices of the damped trend
(Gardner & McKenzie 1985): level' = level + 0.9 trend + step, trend' = 0.9 trend + shock. The shock's variance keeps the trend's
stationary; an observation has variance 1/events + noise². The first period starts the level, as in the engine.
"""
import csv
import math
import pathlib
import platform

import filterpy
import numpy as np
from filterpy.kalman import KalmanFilter

HERE = pathlib.Path(__file__).parent
DAMPING = 0.9
EXPOSURE = 30.0
HISTORIES = (
    [1200, 1180, 1260, 1400, 1390, 1500],
    [60, 75, 66, 120, 300, 900, 1100, 4000],
    [50000, 20000, 8000, 3000, 1200, 500, 200],
)
SETTINGS = ((0.03, 0.0, 0.0), (0.12, 0.05, 0.1), (0.5, 0.15, 0.3), (2.0, 0.3, 0.1))

with open(HERE / "rates.csv", "w", newline="", encoding="utf-8") as file:
    out = csv.writer(file, lineterminator="\n")
    out.writerow(["step", "noise", "trend", "events", "level", "trend_state", "level_variance", "trend_variance", "log_likelihood"])
    for step, noise, trend in SETTINGS:
        for events in HISTORIES:
            kf = KalmanFilter(dim_x=2, dim_z=1)
            kf.F = np.array([[1.0, DAMPING], [0.0, DAMPING]])
            kf.H = np.array([[1.0, 0.0]])
            kf.Q = np.diag([step**2, trend**2 * (1 - DAMPING**2)])
            kf.x = np.array([[math.log(events[0] / EXPOSURE)], [0.0]])
            kf.P = np.diag([1 / events[0] + noise**2, trend**2])
            likelihood = 0.0
            for count in events[1:]:
                kf.predict()
                kf.update(math.log(count / EXPOSURE), R=1 / count + noise**2)
                likelihood += kf.log_likelihood + 0.5 * math.log(2 * math.pi)
            values = (kf.x[0, 0], kf.x[1, 0], kf.P[0, 0], kf.P[1, 1], likelihood)
            out.writerow([step, noise, trend, " ".join(map(str, events)), *(f"{value:.12e}" for value in values)])

print(f"python {platform.python_version()}, numpy {np.__version__}, filterpy {filterpy.__version__}")
