"""The exact flow with general-purpose tools: scipy.sparse.linalg.expm_multiply on the matrix that the library wrote."""
import sys
import time

import numpy as np
from scipy.sparse import coo_matrix
from scipy.sparse.linalg import expm_multiply

folder = sys.argv[1]
n, end = np.fromfile(folder + "/shape.f64")
n = int(n)
right, left, up, down = (np.fromfile(f"{folder}/{name}.f64").reshape(n, n) for name in ("right", "left", "up", "down"))
start = np.fromfile(folder + "/start.f64")
cell = np.arange(n * n).reshape(n, n)
# Rates from one cell to another: columns are where the mass comes from.
rows = np.concatenate([cell[:, 1:].ravel(), cell[:, :-1].ravel(), cell[1:, :].ravel(), cell[:-1, :].ravel()])
columns = np.concatenate([cell[:, :-1].ravel(), cell[:, 1:].ravel(), cell[:-1, :].ravel(), cell[1:, :].ravel()])
rates = np.concatenate([right[:, :-1].ravel(), left[:, 1:].ravel(), up[:-1, :].ravel(), down[1:, :].ravel()])
exits = np.bincount(columns, weights=rates, minlength=n * n)
matrix = coo_matrix((np.concatenate([rates, -exits]), (np.concatenate([rows, cell.ravel()]), np.concatenate([columns, cell.ravel()])))).tocsr()

begin = time.perf_counter()
result = expm_multiply(matrix * end, start)
print("seconds exact-flow", time.perf_counter() - begin)
result.tofile(folder + "/peer.f64")
