#!/usr/bin/python3
"""Writes fd.json, rms_deviation.json, dvars.json and spikes.json beside this
script, from the published formulas, with numpy as the oracle.

    python3 generate.py

Run it again and read the difference before committing a change."""
import json
import os

import numpy as np
from scipy import linalg

HERE = os.path.dirname(os.path.abspath(__file__))


def plain(x):
    """numpy to JSON; NaN becomes null."""
    if isinstance(x, dict):
        return {k: plain(v) for k, v in x.items()}
    if isinstance(x, (list, tuple)):
        return [plain(v) for v in x]
    if isinstance(x, np.ndarray):
        return plain(x.tolist())
    if isinstance(x, (float, np.floating)):
        return None if np.isnan(x) else float(x)
    return x


def write(name, content):
    with open(os.path.join(HERE, name), "w") as f:
        json.dump(plain(content), f, indent=1)
        f.write("\n")


def rotation(axis, degrees):
    k = np.zeros(3)
    k[axis] = np.deg2rad(degrees)
    return linalg.expm(np.cross(np.eye(3), k))


def rigid(R, t):
    T = np.eye(4)
    T[:3, :3], T[:3, 3] = R, t
    return T


def twist(w, v):
    """Matrix exponential of a twist, the definition of the motion itself."""
    G = np.zeros((4, 4))
    G[:3, :3] = np.cross(np.eye(3), np.asarray(w, float))
    G[:3, 3] = v
    return linalg.expm(G)


def fd():
    # Rows worked by hand from Power et al. 2012: n/a, .35+.15, 0, .60+.35, .55+.30.
    rows = np.array([[0, 0, 0, 0, 0, 0], [.1, -.2, .05, .001, 0, -.002], [.1, -.2, .05, .001, 0, -.002],
                     [.4, .1, .05, .003, -.001, .002], [0, 0, 0, 0, 0, 0]])
    rng = np.random.default_rng(11)
    more = np.c_[rng.normal(0, .4, (40, 3)), rng.normal(0, .01, (40, 3))]

    def of(p, r):
        d = np.abs(np.diff(p, axis=0))
        return np.r_[np.nan, d[:, :3].sum(1) + r * d[:, 3:].sum(1)]

    # One rigid motion, quoted about two points: x' = R(x-c) + c + t.
    c, R = np.array([0, 50., 0]), rotation(2, 1)
    about = np.r_[R @ c - c, 0, 0, np.deg2rad(1)]
    write("fd.json", {"source": "Power et al. 2012, NeuroImage 59(3):2142-2154", "cases": [
        {"name": "by hand", "radius": 50, "params": rows, "fd": of(rows, 50)},
        {"name": "random", "radius": 50, "params": more, "fd": of(more, 50)},
        {"name": "random, another radius", "radius": 80, "params": more, "fd": of(more, 80)},
        {"name": "1 degree about the origin", "radius": 50, "params": [[0] * 6, [0, 0, 0, 0, 0, np.deg2rad(1)]],
         "fd": [None, 50 * np.deg2rad(1)]},
        {"name": "the same about (0,50,0)", "radius": 50, "params": [[0.] * 6, about.tolist()],
         "fd": of(np.array([[0] * 6, about]), 50)}]})


def rms():
    """By the formula, and by summing over points drawn evenly from the ball."""
    rng = np.random.default_rng(5)
    n = 1_000_000
    u = rng.normal(size=(n, 3))
    u *= rng.uniform(0, 1, (n, 1)) ** (1 / 3) / np.linalg.norm(u, axis=1, keepdims=True)
    I = np.eye(4)
    cases = []
    for name, a, b, radius, c in (
            ("shift 3 4 0", rigid(np.eye(3), (3, 4, 0)), I, 80, (0, 0, 0)),
            ("1 degree about the centre", rigid(rotation(2, 1), (0, 0, 0)), I, 80, (0, 0, 0)),
            ("1 degree, centre 50 mm off the axis", rigid(rotation(2, 1), (0, 0, 0)), I, 80, (50, 0, 0)),
            ("two poses", twist([.01, -.02, .015], [.5, -.3, .2]), twist([0, .005, 0], [.1, 0, 0]), 80, (2, -10, 5)),
            ("large, left alone by small-angle forms", twist([.6, -.2, .9], [10, -25, 4]), twist([-.3, .5, .1], [3, 0, 40]), 80, (12, -30, 41)),
            ("another radius", twist([.01, -.02, .015], [.5, -.3, .2]), I, 50, (0, 0, 0)),
            ("no motion", twist([.4, .1, -.7], [1, 2, 3]), twist([.4, .1, -.7], [1, 2, 3]), 80, (7, 8, 9))):
        M = a @ np.linalg.inv(b) - I
        A, t = M[:3, :3], M[:3, 3] + M[:3, :3] @ np.array(c, float)
        x = u * radius + np.array(c, float)
        s = ((x @ A.T + M[:3, 3]) ** 2).sum(1)
        mc = np.sqrt(s.mean())
        cases.append({"name": name, "a": a.ravel(), "b": b.ravel(), "radius": radius, "centre": c,
                      "rms": np.sqrt(radius ** 2 / 5 * np.trace(A.T @ A) + t @ t), "drawn": mc,
                      "drawn_se": s.std() / np.sqrt(n) / 2 / mc if mc > 1e-9 else 1e-9})
    write("rms_deviation.json", {"source": "Jenkinson 1999, technical report TR99MJ1", "points": n, "cases": cases})


def dvars():
    small = np.array([[100, 102, 99, 101, 100, 104, 98, 100], [200, 198, 201, 205, 199, 200, 202, 197],
                      [50, 51, 50, 49, 58, 50, 51, 50], [80, 79, 81, 80, 80, 78, 82, 81]], float)
    cases = []
    for name, y in (("4 voxels", small), ("one voxel", small[:1]), ("two volumes", small[:, :2])):
        y = np.asarray(y, np.float64)
        d = np.sqrt((np.diff(y, axis=1) ** 2).mean(0))
        cases.append({"name": name, "voxels_by_volumes": y, "dvars_plain": np.r_[np.nan, d],
                      "dvars_percent": np.r_[np.nan, 100 * d / y.mean()],
                      "tsnr": y.mean(1) / y.std(1, ddof=1)})
    # More voxels than a block of sums holds. Both sides make the values from this
    # rule, so that the file stays small; they are exact in float32.
    v, t = np.mgrid[0:5000, 0:7]
    y = 300 + (v * 37 % 601) + ((v * 7919 + t * 104729 + v * t * 31) % 257) / 16
    d = np.sqrt((np.diff(y, axis=1) ** 2).mean(0))
    sd = y.std(1, ddof=1)                                       # a few voxels are constant: tSNR 0
    tsnr = np.divide(y.mean(1), sd, out=np.zeros_like(sd), where=sd > 0)
    write("dvars.json", {"source": "Smyser et al. 2010, Cereb. Cortex 20(12):2852-2862; Power et al. 2012", "cases": cases,
                         "rule": {"text": "300 + (v*37 mod 601) + ((v*7919 + t*104729 + v*t*31) mod 257)/16", "nv": 5000, "nt": 7,
                                  "dvars_percent": np.r_[np.nan, 100 * d / y.mean()], "tsnr_mean": tsnr.mean(), "tsnr_first": tsnr[:20]}})


def spikes():
    """The score of the Go package's documentation, written straight from its two steps."""
    nx, ny, nz, nt = 6, 5, 4, 9
    z, yy, x = np.mgrid[0:nz, 0:ny, 0:nx]
    vol = 400 + 10 * x + 3 * yy + z
    t = np.arange(nt)[:, None, None, None]
    y = vol + ((x * 13 + yy * 29 + z * 7 + t * 11 + x * t * 5 + z * t * 3) % 17) / 4.0     # t, z, y, x
    y[4, 2] += 40 * ((x[2] + yy[2]) % 2)
    cases = []
    for axis in range(3):
        back = 2 - axis                                         # x is the last index of a volume
        d = np.zeros((nt, (nx, ny, nz)[axis]))
        for i in range(nt):
            first = min(max(i - 2, 0), nt - 5)
            near = [u for u in range(first, first + 5) if u != i]
            dev = np.abs(y[i] - np.median(y[near], axis=0))
            d[i] = dev.mean(axis=tuple(k for k in range(3) if k != back))
        mid = np.median(d, axis=0)
        cases.append({"axis": axis, "score": (d - mid) / (1.4826 * np.median(np.abs(d - mid), axis=0))})
    write("spikes.json", {"source": "evenkeel", "size": [nx, ny, nz, nt], "data": y.ravel(), "cases": cases})


fd()
rms()
dvars()
spikes()
