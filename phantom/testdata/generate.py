#!/usr/bin/env python3
"""Regenerates golden.json beside it: python3 generate.py (numpy, scipy).

Oracles: scipy.stats.gamma for the double gamma and its integral, scipy.integrate
for the response to blocks, scipy.stats.rice for the moments of Rician noise,
scipy.spatial.transform for turns about three axes.
"""
import json
import os

import numpy
import scipy
from scipy import integrate, stats
from scipy.spatial.transform import Rotation


def h(t):
    return stats.gamma.pdf(t, 5, scale=1.3) - 0.2 * stats.gamma.pdf(t, 9, scale=1.9)


def response(events, t):
    """The double gamma convolved with boxcars (impulses for duration 0), over 4/5."""
    s = 0.0
    for onset, duration in events:
        if duration == 0:
            s += h(t - onset)
        else:
            a, b = max(0.0, t - onset - duration), max(0.0, t - onset)
            s += integrate.quad(h, a, b, epsabs=1e-14, epsrel=1e-13, limit=200)[0]
    return s / (4 / 5)


times = [float(t) for t in range(33)] + [-1.0, 0.1, 0.5, 2.5, 7.3, 11.0, 21.2, 60.0]
events = [[3.0, 12.0], [20.0, 0.0], [31.5, 4.25]]
at = [0.0, 3.5, 8.0, 15.0, 19.99, 24.1, 33.0, 40.7, 55.0]
turns = [[0.02, -0.03, 0.05], [0.1, 0.2, -0.3], [-1.2, 0.7, 2.9]]
ratios = [0.0, 0.5, 1.0, 2.0, 4.0, 10.0]
fine = numpy.linspace(0, 32, 320001)

doc = {
    "made_by": "generate.py",
    "versions": {"numpy": numpy.__version__, "scipy": scipy.__version__},
    "double_gamma": {"t": times, "h": [float(h(t)) for t in times],
                     "peak": float(h(fine).max()), "peak_t": float(fine[h(fine).argmax()]),
                     "trough": float(h(fine).min()), "trough_t": float(fine[h(fine).argmin()])},
    "response": {"events": events, "t": at, "value": [float(response(events, t)) for t in at]},
    # x' = Rz Ry Rx x: extrinsic turns about x, then y, then z.
    "turns": [{"xyz": w, "matrix": Rotation.from_euler("xyz", w).as_matrix().ravel().tolist()} for w in turns],
    "rice": [{"ratio": a, "mean": float(stats.rice.mean(a)), "sd": float(stats.rice.std(a))} for a in ratios],
}
with open(os.path.join(os.path.dirname(os.path.abspath(__file__)), "golden.json"), "w") as f:
    json.dump(doc, f, indent=1)
    f.write("\n")
