"""Pairs of cosine transforms of a square grid, one thread: the unit in which steps in the plane are priced."""
import sys
import time

import numpy as np
from scipy.fft import dctn, idctn

folder = sys.argv[1]
n, pairs = (int(value) for value in np.fromfile(folder + "/shape.f64"))
with open(folder + "/name.txt", encoding="ascii") as file:
    name = file.read().strip()
field = np.random.default_rng(1).standard_normal((n, n))
field = idctn(dctn(field, workers=1), workers=1)
# The median of single pairs: the machine may be busy, and pauses are not the transform's.
times = []
for _ in range(15):
    begin = time.perf_counter()
    field = idctn(dctn(field, workers=1), workers=1)
    times.append(time.perf_counter() - begin)
print("seconds", name, pairs * sorted(times)[len(times) // 4])
