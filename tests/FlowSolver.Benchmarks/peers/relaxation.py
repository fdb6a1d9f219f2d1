"""Slow modes with general-purpose tools: scipy.sparse.linalg.eigsh (shift-invert) on the symmetric form of the matrix that the library wrote."""
import sys
import time

import numpy as np
from scipy.sparse import coo_matrix
from scipy.sparse.linalg import eigsh

folder = sys.argv[1]
n, modes = np.fromfile(folder + "/shape.f64").astype(int)
right, left, up, down = (np.fromfile(f"{folder}/{name}.f64").reshape(n, n) for name in ("right", "left", "up", "down"))
cell = np.arange(n * n).reshape(n, n)
along_x = np.sqrt(right[:, :-1] * left[:, 1:]).ravel()
along_y = np.sqrt(up[:-1, :] * down[1:, :]).ravel()
exits = (right + left + up + down).ravel()
a = np.concatenate([cell[:, 1:].ravel(), cell[:, :-1].ravel(), cell[1:, :].ravel(), cell[:-1, :].ravel(), cell.ravel()])
b = np.concatenate([cell[:, :-1].ravel(), cell[:, 1:].ravel(), cell[:-1, :].ravel(), cell[1:, :].ravel(), cell.ravel()])
matrix = coo_matrix((np.concatenate([-along_x, -along_x, -along_y, -along_y, exits]), (a, b))).tocsc()

begin = time.perf_counter()
# Equilibrium's zero is one of the eigenvalues; a shift just below it keeps the factored matrix regular.
values = eigsh(matrix, k=modes + 1, sigma=-1e-3, which="LM", return_eigenvectors=True)[0]
print("seconds relaxation", time.perf_counter() - begin)
np.sort(values)[1:].tofile(folder + "/peer.f64")
