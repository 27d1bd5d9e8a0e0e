#!/usr/bin/env python3
"""Makes the golden values beside it: python3 generate.py (numpy 1.24, scipy 1.10 from Debian).

se3.json     matrix exponentials of twists (scipy.linalg.expm) and Euler products (numpy)
spline.json  B-spline poles from the zeros of the sampled basis (numpy.roots), coefficients under the mirror rule
             (scipy.ndimage.spline_filter1d) and under the odd rule (a dense solve of the interpolation conditions),
             values of a volume (scipy.ndimage.map_coordinates)
smooth.json  a Gaussian filter (scipy.ndimage.gaussian_filter1d on data continued by the odd rule by hand)
"""
import json
import numpy as np
from numpy.random import default_rng
from scipy import linalg, ndimage
from scipy.interpolate import BSpline


def save(name, doc):
    def plain(o):
        if isinstance(o, dict): return {k: plain(v) for k, v in o.items()}
        if isinstance(o, (list, tuple, np.ndarray)): return [plain(v) for v in o]
        return o.item() if isinstance(o, np.generic) else o
    with open(name, 'w') as f: json.dump(plain(doc), f, indent=1); f.write('\n')


def skew(w): return np.array([[0, -w[2], w[1]], [w[2], 0, -w[0]], [-w[1], w[0], 0]])


def rot(axis, a):
    w = np.zeros(3); w[axis] = a; return linalg.expm(skew(w))


cases = []
for w, v in [((0, 0, 0), (4, -1, 2)), ((.2, 0, 0), (0, 0, 0)), ((.1, -.2, .3), (1, -2, .5)), ((3e-4, -1e-4, 2e-4), (1, 2, 3)), ((1e-9, 0, 2e-9), (5, 6, 7)), ((0, 0, 1.4), (1, 0, -3)), ((1.5, 1.2, -1.8), (12, 25, -31))]:
    G = np.zeros((4, 4)); G[:3, :3] = skew(w); G[:3, 3] = v
    cases.append(dict(w=w, v=v, matrix=linalg.expm(G)))
euler = [dict(turn=t, rzryrx=rot(2, t[2]) @ rot(1, t[1]) @ rot(0, t[0])) for t in [(.03, -.02, .04), (.3, .5, -.7), (-1.2, .9, 2.5)]]
save('se3.json', dict(exp=cases, euler=euler))


def basis(n, x):
    b = BSpline.basis_element(np.arange(n + 2) - (n + 1) / 2, extrapolate=False); return np.nan_to_num(b(np.asarray(x, float)))


def odd(x, k):
    N = len(x)
    if N == 1: return x[0]
    if k < 0: return 2 * x[0] - odd(x, -k)
    if k >= N: return 2 * x[-1] - odd(x, 2 * (N - 1) - k)
    return x[k]


def odd_coefficients(x, n):
    """The N coefficients whose odd continuation interpolates x at every sample."""
    N = len(x); E = np.eye(N); A = np.zeros((N, N)); r = n // 2
    for i in range(N):
        for j in range(-r, r + 1): A[i] += basis(n, j) * np.array([odd(E[:, c], i + j) for c in range(N)])
    return np.linalg.solve(A, x)


g = default_rng(20261201)
lines = {'impulse': np.eye(11)[5], 'edge': np.eye(7)[0], 'ramp': np.arange(9.) * 2 - 3, 'noise24': g.normal(100, 20, 24).round(3), 'noise6': g.normal(0, 5, 6).round(3), 'three': np.array([4., -1, 2]), 'two': np.array([1., 5])}
out = dict(poles={}, lines=[])
for n in (3, 5):
    z = np.roots(basis(n, np.arange(-(n // 2), n // 2 + 1))); out['poles'][str(n)] = np.sort(z[np.abs(z) < 1].real)
    for name, x in lines.items():
        out['lines'].append(dict(name=name, degree=n, x=x, mirror=ndimage.spline_filter1d(x, n, mode='mirror', output=float), odd=odd_coefficients(x, n)))
vol = g.normal(500, 100, (7, 6, 5)).round(1)  # vol[i][j][k]
pts = np.c_[g.uniform(0, 6, 40), g.uniform(0, 5, 40), g.uniform(0, 4, 40)].round(4); pts[0] = 0; pts[1] = (6, 5, 4); pts[2] = (3, 2, 1)
out['volume'] = dict(size=vol.shape, values=vol.ravel(order='F'), points=pts, cubic=ndimage.map_coordinates(vol, pts.T, order=3, mode='mirror', output=float), quintic=ndimage.map_coordinates(vol, pts.T, order=5, mode='mirror', output=float))
save('spline.json', out)

x = g.normal(50, 10, 17).round(3); s = []
for sigma in (.4, .55, 1.3, 2.4):
    r = int(np.ceil(4 * sigma)); e = np.array([odd(x, k) for k in range(-r, len(x) + r)])
    s.append(dict(sigma=sigma, y=ndimage.gaussian_filter1d(e, sigma, truncate=r / sigma)[r:-r]))
save('smooth.json', dict(x=x, cases=s))
