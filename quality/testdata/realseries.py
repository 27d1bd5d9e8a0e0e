#!/usr/bin/python3
"""realseries.py IMAGE OUT: oracle for the test on the real series.

Writes OUT/data.f32 (the series, x fastest, then volumes), OUT/mask.u8 (voxels
whose mean is above a quarter of the 98th percentile) and OUT/expect.json: DVARS
in percent of the mean inside the mask, and tSNR, by numpy in float64."""
import json
import sys

import nibabel as nib
import numpy as np

image, out = sys.argv[1:]
y = np.asarray(nib.load(image).dataobj, np.float32)
nt = y.shape[3]
y = y.reshape(-1, nt, order="F").T.copy()                 # volume by voxel
y.tofile(out + "/data.f32")
d = y.astype(np.float64)
mean = d.mean(0)
mask = mean > .25 * np.percentile(mean, 98)
mask.astype(np.uint8).tofile(out + "/mask.u8")
dv = np.sqrt((np.diff(d[:, mask], axis=0) ** 2).mean(1))
sd = d.std(0, ddof=1) if nt > 1 else np.zeros_like(mean)
tsnr = np.divide(mean, sd, out=np.zeros_like(mean), where=sd > 0)
json.dump({"nv": d.shape[1], "nt": nt, "dvars": (100 * dv / d[:, mask].mean()).tolist(),
           "tsnr_inside_median": float(np.median(tsnr[mask])), "tsnr_sum": float(tsnr.sum())}, open(out + "/expect.json", "w"))
