"""One JKO step on the line: Newton's method on the nodes of parcels of fixed mass, with NumPy and scipy.linalg.solveh_banded."""
import sys
import time

import numpy as np
from scipy.linalg import solveh_banded

folder = sys.argv[1]
step, temperature, origin = np.fromfile(folder + "/shape.f64")
mass = np.fromfile(folder + "/masses.f64")
old = np.fromfile(folder + "/nodes.f64") + origin
# Gauss points and weights of three-point quadrature on [0, 1].
places = 0.5 + 0.5 * np.array([-0.7745966692414834, 0.0, 0.7745966692414834])
weights = np.array([5, 8, 5]) / 18


def newton_step(x):
    """Newton direction of the inner nodes, and the decrement."""
    width = x[1:] - x[:-1]
    pull = temperature * mass / width
    stiffness = pull / width
    way = x - old
    lower = mass * (2 * way[:-1] + way[1:]) / (6 * step) + pull
    upper = mass * (2 * way[1:] + way[:-1]) / (6 * step) - pull
    lower_lower = mass / (3 * step) + stiffness
    upper_upper = lower_lower.copy()
    lower_upper = mass / (6 * step) - stiffness
    for place, weight in zip(places, weights):
        point = x[:-1] + place * width
        square = point * point
        slope = weight * mass * (point * (square - 1) + 0.1)
        bend = weight * mass * (3 * square - 1)
        lower += (1 - place) * slope
        upper += place * slope
        lower_lower += (1 - place) ** 2 * bend
        upper_upper += place**2 * bend
        lower_upper += place * (1 - place) * bend
    gradient = upper[:-1] + lower[1:]
    matrix = np.empty((2, len(gradient)))
    matrix[1] = upper_upper[:-1] + lower_lower[1:]
    matrix[0, 1:] = lower_upper[1:-1]
    direction = solveh_banded(matrix, -gradient, check_finite=False)
    return direction, -gradient @ direction


def solve():
    x = old.copy()
    for iteration in range(200):
        direction, decrement = newton_step(x)
        move = np.zeros_like(x)
        move[1:-1] = direction
        change = (move[1:] - move[:-1]) / (x[1:] - x[:-1])
        x += move * min(1.0, 0.995 / max(-change.min(), 1e-300))
        heavy = mass > 1e-12
        if np.sqrt(step * abs(decrement)) < 1e-8 and np.abs(change[heavy]).max() < 1e-6:
            break
    return x, iteration + 1


times = []
for _ in range(5):
    begin = time.perf_counter()
    result, iterations = solve()
    times.append(time.perf_counter() - begin)
print("iterations", iterations)
print("seconds jko-line", min(times))
(result - origin).tofile(folder + "/peer.f64")
