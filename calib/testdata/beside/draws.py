"""A million draws through a chain of three generations, vectorised in NumPy.

The other side of BenchmarkDepthThree in calib/montecarlo. It needs a Python
with NumPy (Debian: apt-get install python3-numpy) and nothing else of it is
needed to build or test. From this folder, on one core, and right before or
after the other:

    taskset -c 0 env OMP_NUM_THREADS=1 python3 draws.py
    go test -run '^$' -bench DepthThree/workers=1 -cpu 1 ../../montecarlo

In each generation a line goes through two anchors, each read five times, and a
sample read five times gets its value by it, which is an anchor of the next:

    raw = 0.3 + 0.98 true, u(reading) = 0.05
    A = -35(0.04), B = 20(0.04), sample 1 = -12;  C = 15(0.03), sample 2 = 3;
    D = -40(0.05), sample 3 = -20

Three ways are timed, each with the mean, the standard deviation and the
symmetric 95 % interval at the end, by the processor's time of this process:
every reading drawn, all at once and in strips that fit the cache (faster than
all at once), and only the means of the readings drawn (which takes from the
problem what a chain in general does not allow: known and equal variances).
"""
import time

import numpy as np

DRAWS = 1_000_000
GENERATIONS = [(20.0, 0.04, -12.0), (15.0, 0.03, 3.0), (-40.0, 0.05, -20.0)]
U, REPEATS = 0.05, 5


def chain(rng, n, readings):
    """n values of the third sample; readings(true) draws n means of raw deltas."""
    low = -35 + 0.04 * rng.standard_normal(n)
    at = -35.0  # the value about which the anchor's readings scatter
    for value, u, sample in GENERATIONS:
        high = value + u * rng.standard_normal(n)
        r1, r2, r3 = readings(at), readings(value), readings(sample)
        slope = (r2 - r1) / (high - low)
        low = low + (r3 - r1) / slope
        at = sample
    return low


def every_reading(rng, n):
    def mean(true):
        r = rng.standard_normal((REPEATS, n))
        r *= U
        r += 0.3 + 0.98 * true
        return r.mean(axis=0)
    return chain(rng, n, mean)


def strips(rng, n, size=4096):
    out = np.empty(n)
    for i in range(0, n, size):
        k = min(size, n - i)
        out[i:i + k] = every_reading(rng, k)
    return out


def means_only(rng, n):
    def mean(true):
        return 0.3 + 0.98 * true + (U / REPEATS ** 0.5) * rng.standard_normal(n)
    return chain(rng, n, mean)


def means_in_strips(rng, n, size=4096):
    out = np.empty(n)
    for i in range(0, n, size):
        k = min(size, n - i)
        out[i:i + k] = means_only(rng, k)
    return out


def main():
    for name, way in [("every reading", every_reading), ("every reading, in strips", strips), ("means only", means_only), ("means only, in strips", means_in_strips)]:
        best, answer = float("inf"), None
        for seed in range(7):
            rng = np.random.Generator(np.random.SFC64(seed))  # NumPy's fastest
            start = time.process_time()
            v = way(rng, DRAWS)
            answer = v.mean(), v.std(ddof=1), *np.quantile(v, [0.025, 0.975])
            best = min(best, time.process_time() - start)
        print(f"{name}: {best:.3f} s, mean {answer[0]:.4f}, u {answer[1]:.5f}, interval {answer[2]:.4f} {answer[3]:.4f}")


if __name__ == "__main__":
    main()
