# Exact transport between masses at cell centres, by linear programming (HiGHS through SciPy), for small plane grids.
# Writes discrete-transport.csv beside this file. Made with Python 3.11, NumPy 1.24.2, SciPy 1.10.1 on 2026-12-01; nine digits of W2 are trusted
# (primal and dual tolerances 1e-10). Run: /usr/bin/python3 discrete-transport.py
import csv
import os
import numpy as np
from scipy.optimize import linprog
from scipy.sparse import coo_matrix


def centers(length, cells):
    return (np.arange(cells) + 0.5) * length / cells


def solve(nx, ny, lx, ly, px, py, a, b):
    x = np.tile(centers(lx, nx), ny)
    y = np.repeat(centers(ly, ny), nx)
    dx = np.abs(x[:, None] - x[None, :])
    dy = np.abs(y[:, None] - y[None, :])
    if px:
        dx = np.minimum(dx, lx - dx)
    if py:
        dy = np.minimum(dy, ly - dy)
    from_, to = np.flatnonzero(a), np.flatnonzero(b)
    cost = (dx ** 2 + dy ** 2)[np.ix_(from_, to)]
    m, n = cost.shape
    rows = np.concatenate([np.repeat(np.arange(m), n), m + np.tile(np.arange(n), m)])
    matrix = coo_matrix((np.ones(2 * m * n), (rows, np.tile(np.arange(m * n), 2))))
    # The last row follows from the others; with rounding it would make the problem infeasible.
    found = linprog(cost.ravel(), A_eq=matrix.tocsr()[:-1], b_eq=np.concatenate([a[from_], b[to]])[:-1], bounds=(0, None), method="highs",
                    options={"primal_feasibility_tolerance": 1e-10, "dual_feasibility_tolerance": 1e-10})
    assert found.status == 0, found.message
    return np.sqrt(found.fun)


def main():
    nx, ny, lx, ly = 14, 12, 2.0, 1.5
    x = np.tile(centers(lx, nx), ny)
    y = np.repeat(centers(ly, ny), nx)
    random = np.random.default_rng(7)
    bump = lambda cx, cy, s: np.exp(-((x - cx) ** 2 + (y - cy) ** 2) / (2 * s * s))
    box = lambda x0, x1, y0, y1: ((x > x0) & (x < x1) & (y > y0) & (y < y1)).astype(float)
    cases = {
        "far-bumps": (0, 0, bump(0.5, 0.4, 0.15), bump(1.5, 1.1, 0.2)),
        "box-across": (0, 0, box(0.1, 0.6, 0.1, 0.7), box(1.4, 1.9, 0.8, 1.4)),
        "one-into-two": (0, 0, box(0.7, 1.3, 0.5, 1.0), box(0, 0.4, 0, 1.5) + box(1.6, 2, 0, 1.5)),
        "rough": (0, 0, random.random(nx * ny), random.random(nx * ny)),
        "across-the-cut": (1, 0, bump(0.15, 0.5, 0.2), bump(1.8, 0.9, 0.2)),
        "torus": (1, 1, box(0, 0.3, 0, 0.4) + 0.01, box(1.7, 2, 1.1, 1.5) + 0.01),
        "rough-torus": (1, 1, random.random(nx * ny), random.random(nx * ny)),
    }
    here = os.path.dirname(os.path.abspath(__file__))
    with open(os.path.join(here, "discrete-transport.csv"), "w", newline="\n") as file:
        out = csv.writer(file, lineterminator="\n")
        out.writerow(["case", "nx", "ny", "lx", "ly", "periodic_x", "periodic_y", "w2", "a", "b"])
        for name, (px, py, a, b) in cases.items():
            a, b = a / a.sum(), b / b.sum()
            a[a < 1e-12], b[b < 1e-12] = 0, 0
            a, b = a / a.sum(), b / b.sum()
            w2 = solve(nx, ny, lx, ly, px, py, a, b)
            text = [" ".join(repr(float(v)) for v in f) for f in (a, b)]
            out.writerow([name, nx, ny, lx, ly, px, py, repr(float(w2)), *text])
            print(name, w2)


main()
