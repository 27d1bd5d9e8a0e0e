#!/usr/bin/env python3
"""Makes near.json beside it: python3 near.py (numpy 1.24, scipy 1.10 from Debian).

A volume of noise shifted by parts of voxels, order 3 and 5: scipy.ndimage.map_coordinates on the volume continued by the
odd rule f(-k) = 2 f(0) - f(k), which is numpy.pad(mode='reflect', reflect_type='odd'), by 40 samples: what scipy does at its own
ends is lost on the way (0.431^40 = 2e-15). Where a shift leaves the field the nearest point on its edge is taken.
"""
import json
import numpy as np
from scipy import ndimage

g = np.random.default_rng(1805)
n = (13, 9, 6)
vol = g.normal(500, 100, n).round(1)
pad = 40
e = np.pad(vol, pad, mode='reflect', reflect_type='odd')
cases = []
for s in [(.3, -.45, .2), (-.7, 0, .5), (0, 1.25, -1.6)]:
    case = dict(shift=s)
    at = [np.clip(np.arange(m) + d, 0, m - 1) + pad for m, d in zip(n, s)]
    for name, order in (('cubic', 3), ('quintic', 5)):
        v = ndimage.map_coordinates(e, np.meshgrid(*at, indexing='ij'), order=order, mode='mirror', output=float)
        case[name] = v.ravel(order='F').round(6).tolist()
    cases.append(case)
with open('near.json', 'w') as f:
    json.dump(dict(size=n, values=vol.ravel(order='F').tolist(), cases=cases), f); f.write('\n')
