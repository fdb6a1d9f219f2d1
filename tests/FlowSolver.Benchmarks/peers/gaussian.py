"""Gaussian convolution with scipy.ndimage, the same deviation, radius and mirrored ends, one thread."""
import sys
import time

import numpy as np
from scipy.ndimage import gaussian_filter

folder = sys.argv[1]
n, radius, deviation = np.fromfile(folder + "/shape.f64")
field = np.fromfile(folder + "/field.f64").reshape(int(n), int(n))
# The radius is truncate * deviation + 0.5 rounded down.
settings = {"sigma": deviation, "mode": "reflect", "truncate": radius / deviation}
result = np.empty_like(field)
times = []
for _ in range(30):
    begin = time.perf_counter()
    gaussian_filter(field, output=result, **settings)
    times.append(time.perf_counter() - begin)
print("seconds gaussian", min(times))
result.tofile(folder + "/peer.f64")
