"""Resamples a volume by scipy as often as asked, writes the last and prints the processor time of one, in seconds.

python resampling.py DIR NX NY NZ TIMES
"""
import os
import sys
import time

import numpy as np
from scipy import ndimage

folder, nx, ny, nz, times = sys.argv[1], *map(int, sys.argv[2:])
vol = np.fromfile(os.path.join(folder, 'volume.raw'), '<f4').reshape(nz, ny, nx)  # x fastest: its own order, too
m = np.loadtxt(os.path.join(folder, 'matrix.txt')).reshape(4, 4)
axes = [2, 1, 0]
matrix, offset = m[:3, :3][np.ix_(axes, axes)], m[:3, 3][axes]
out = np.empty_like(vol)
begin = time.process_time()
for _ in range(times):
    ndimage.affine_transform(vol, matrix, offset, output=out, order=5, mode='mirror')
spent = time.process_time() - begin
out.astype('<f4').tofile(os.path.join(folder, 'scipy.raw'))
print(spent / times)
