"""Langevin samplers as vectorised NumPy loops over 1,000,000 walkers in V = x^4/4 - x^2/2, T = 0.5, step 0.02, one thread.

The time of a step is the least of twenty. Arrays are updated in place, powers are products, nothing is reflected at walls: the peer does less than the row beside it.
"""
import os
import sys
import time

import numpy as np

N, T, TAU, SIZE = 1_000_000, 0.5, 0.02, 8.0
SIGMA = np.sqrt(2 * T * TAU)


class Loop:
    def __init__(self):
        self.rng = np.random.default_rng(1)
        self.x = 0.7 * self.rng.standard_normal(N)
        self.z = np.empty(N)
        self.g = np.empty(N)
        self.h = np.empty(N)
        self.d = np.empty(N)

    def value(self, x):
        s = x * x
        return s * (0.25 * s - 0.5)

    def gradient(self, x):
        np.multiply(x, x, out=self.g)
        self.g -= 1.0
        self.g *= x
        return self.g

    def noise(self, scale):
        self.rng.standard_normal(out=self.z)
        self.z *= scale
        return self.z

    def explicit(self, t):
        g = self.gradient(self.x)
        g *= t
        self.x -= g

    def proximal_of(self, x, t):
        y = x.copy()
        while True:
            np.multiply(y, y, out=self.h)
            np.subtract(self.h, 1.0, out=self.g)
            self.g *= y
            self.g *= t
            self.g += y
            self.g -= x
            if np.abs(self.g).max() <= 1e-12 * SIZE:
                return y
            self.h *= 3 * t
            self.h += 1 - t
            self.g /= self.h
            y -= self.g

    def proximal(self, t):
        self.x = self.proximal_of(self.x, t)

    def flow(self, t):
        # One step of the same fifth-order pair, with the slopes kept as arrays; no error control.
        a = [[1 / 5], [3 / 40, 9 / 40], [44 / 45, -56 / 15, 32 / 9], [19372 / 6561, -25360 / 2187, 64448 / 6561, -212 / 729],
             [9017 / 3168, -355 / 33, 46732 / 5247, 49 / 176, -5103 / 18656], [35 / 384, 0, 500 / 1113, 125 / 192, -2187 / 6784, 11 / 84]]
        k = [self.gradient(self.x).copy()]
        y = self.x
        for row in a:
            y = self.x.copy()
            for weight, slope in zip(row, k):
                if weight:
                    np.multiply(slope, -t * weight, out=self.h)
                    y += self.h
            k.append(self.gradient(y).copy())
        self.x = y

    def ula(self):
        self.explicit(TAU)
        self.x += self.noise(SIGMA)

    def proximal_ula(self):
        self.proximal(TAU)
        self.x += self.noise(SIGMA)

    def noise_then_prox(self):
        self.x += self.noise(SIGMA)
        self.proximal(TAU)

    def half_explicit_half_prox(self):
        self.explicit(TAU / 2)
        self.x += self.noise(SIGMA)
        self.proximal(TAU / 2)

    def half_noise_flow_half_noise(self):
        self.x += self.noise(SIGMA * np.sqrt(0.5))
        self.flow(TAU)
        self.x += self.noise(SIGMA * np.sqrt(0.5))

    def leimkuhler_matthews(self):
        if not hasattr(self, "old"):
            self.old = self.rng.standard_normal(N) * (SIGMA / 2)
        self.explicit(TAU)
        self.x += self.old
        self.x += self.noise(SIGMA / 2)
        self.old, self.z = self.z, self.old

    def accept(self, y, v, forward, backward):
        forward *= forward
        backward *= backward
        forward -= backward
        forward /= 4 * T * TAU
        forward += (self.v - v) / T
        taken = np.log(self.rng.random(N)) < forward
        np.copyto(self.x, y, where=taken)
        np.copyto(self.v, v, where=taken)
        return taken

    def mala(self):
        if not hasattr(self, "v"):
            self.v = self.value(self.x)
            self.slope = self.gradient(self.x).copy()
        y = self.x - TAU * self.slope
        forward = self.noise(SIGMA).copy()
        y += forward
        v = self.value(y)
        slope = self.gradient(y)
        backward = self.x - y + TAU * slope
        taken = self.accept(y, v, forward, backward)
        np.copyto(self.slope, slope, where=taken)

    def proximal_mala(self):
        if not hasattr(self, "v"):
            self.v = self.value(self.x)
            self.aim = self.proximal_of(self.x, TAU)
        forward = self.noise(SIGMA).copy()
        y = self.aim + forward
        v = self.value(y)
        aim = self.proximal_of(y, TAU)
        backward = self.x - aim
        taken = self.accept(y, v, forward, backward)
        np.copyto(self.aim, aim, where=taken)

    def noisy_gradient(self):
        g = self.gradient(self.x)
        g *= TAU
        self.x -= g
        self.x += self.noise(TAU)
        self.x += self.noise(SIGMA)


METHODS = {
    "ula": Loop.ula,
    "proximal-ula": Loop.proximal_ula,
    "noise-then-prox": Loop.noise_then_prox,
    "half-explicit-half-prox": Loop.half_explicit_half_prox,
    "half-noise-flow-half-noise": Loop.half_noise_flow_half_noise,
    "leimkuhler-matthews": Loop.leimkuhler_matthews,
    "mala": Loop.mala,
    "proximal-mala": Loop.proximal_mala,
    "ula-decreasing": Loop.ula,
    "ula-noisy-gradient": Loop.noisy_gradient,
}

# The rows stand in the order of the library's catalogue, as METHODS does; without a folder all are run.
names = list(METHODS)
if len(sys.argv) > 1:
    names = [names[int(np.fromfile(os.path.join(sys.argv[1], "row.f64"))[0])]]
for name in names:
    step = METHODS[name]
    loop = Loop()
    step(loop)
    best = float("inf")
    for _ in range(20):
        start = time.perf_counter()
        step(loop)
        best = min(best, time.perf_counter() - start)
    print("seconds", "sampler-" + name, best, flush=True)
