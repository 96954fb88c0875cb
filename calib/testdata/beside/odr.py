"""One joint fit in SciPy's ODR: 100 readings of 5 anchors, drift, size, 20 samples.

The other side of BenchmarkBeside in calib. It needs a Python with NumPy and
SciPy (Debian: apt-get install python3-numpy python3-scipy); nothing of it is
needed to build or test. From this folder, on one core, and right before or
after the other:

    taskset -c 0 env OMP_NUM_THREADS=1 python3 odr.py
    go test -run '^$' -bench Beside -cpu 1 ../..

The problem is problem.json, a request of POST /v1/calculations/fit:

    raw = intercept + slope true + drift (t - t0) + size (s - s0),
    u(raw) = 0.05 for each reading, u(true) = 0.04 for each anchor

Four statements of it are timed. Exactly the problem of the fit are the first
two: an observation for each anchor whose 20 responses share one true value, and
ordinary least squares with the anchors' true values among the parameters and
their assigned values among the data. The third gives every reading a true value
of its own, as ODR is mostly used; its anchors average out, which is wrong, but
it is timed all the same; the fourth is the third with time and size among the
inputs. All read the values of the samples off the fit and nothing else. Each is
timed with derivatives by differences, ODR's default, and with derivatives given,
by the processor's time of this process, best of several rounds, from a start by
least squares. With --leave-out the fit is also
repeated without each anchor in turn, as the fit's diagnostics do.
"""
import json
import pathlib
import sys
import time

import numpy as np
from scipy import odr

problem = json.loads((pathlib.Path(__file__).parent / "problem.json").read_text())
codes = [a["material"] for a in problem["anchors"]]
y = np.array([a["value"] for a in problem["anchors"]])
uy = np.array([a["u"] for a in problem["anchors"]])
fitted = [r for r in problem["readings"] if r["role"] == "anchor"]
raw, u, t, s = (np.array([r[k] for r in fitted]) for k in ("raw", "u", "time", "size"))
at = np.array([codes.index(r["material"]) for r in fitted])
t, s, t0, s0 = t - t.mean(), s - s.mean(), t.mean(), s.mean()
samples = [r for r in problem["readings"] if r["role"] == "sample"]
xraw, xt, xs = (np.array([r[k] for r in samples]) for k in ("raw", "time", "size"))
xt, xs = xt - t0, xs - s0


# Whether ODR is given the derivatives or forms them by differences (its default).
derivatives = True


def model(f, by_b, by_x=None):
    if derivatives:
        return odr.Model(f, fjacb=by_b, fjacd=by_x)
    return odr.Model(f)


def start(keep):
    x = np.column_stack([np.ones(keep.sum()), y[at[keep]], t[keep], s[keep]])
    return np.linalg.lstsq(x, raw[keep], rcond=None)[0]


def values(b):
    return (xraw - b[0] - b[2] * xt - b[3] * xs) / b[1]


def responses(keep):
    """One observation for each anchor; its readings are the responses."""
    anchors = np.unique(at[keep])
    order = np.argsort(at[keep], kind="stable")
    rows = lambda v: v[keep][order].reshape(len(anchors), -1).T
    rr, tt, ss = rows(raw), rows(t), rows(s)
    one = np.ones_like(tt)

    def f(b, x):
        return b[0] + b[1] * x + b[2] * tt + b[3] * ss

    def by_b(b, x):
        return np.stack([one, one * x, tt, ss], axis=1)

    def by_x(b, x):
        return (b[1] * one)[:, None, :]

    data = odr.Data(y[anchors][None, :], rr, wd=uy[anchors][None, :] ** -2, we=np.full(len(rr), u[0] ** -2))
    return odr.ODR(data, model(f, by_b, by_x), beta0=start(keep)).run()


def parameters(keep):
    """The anchors' true values among the parameters."""
    anchors = np.unique(at[keep])
    k, n = len(anchors), keep.sum()
    place = np.searchsorted(anchors, at[keep])
    tt, ss = t[keep], s[keep]
    rows = np.arange(n)

    def f(b, x):
        return np.concatenate([b[0] + b[1] * b[4:][place] + b[2] * tt + b[3] * ss, b[4:]])

    def by_b(b, x):
        j = np.zeros((4 + k, n + k))
        j[0, :n], j[1, :n], j[2, :n], j[3, :n] = 1, b[4:][place], tt, ss
        j[4 + place, rows] = b[1]
        j[4 + np.arange(k), n + np.arange(k)] = 1
        return j

    data = odr.Data(np.arange(n + k), np.concatenate([raw[keep], y[anchors]]), we=np.concatenate([u[keep], uy[anchors]]) ** -2)
    fit = odr.ODR(data, model(f, by_b), beta0=np.concatenate([start(keep), y[anchors]]))
    fit.set_job(fit_type=2)
    return fit.run()


def each_reading(keep):
    """A true value for each reading."""
    tt, ss = t[keep], s[keep]
    one = np.ones_like(tt)

    def f(b, x):
        return b[0] + b[1] * x + b[2] * tt + b[3] * ss

    def by_b(b, x):
        return np.stack([one, x, tt, ss])

    def by_x(b, x):
        return b[1] * one

    data = odr.Data(y[at[keep]], raw[keep], wd=uy[at[keep]] ** -2, we=u[keep] ** -2)
    return odr.ODR(data, model(f, by_b, by_x), beta0=start(keep)).run()


def inputs(keep):
    """A true value for each reading, with time and size as inputs that are exact."""
    x = np.stack([y[at[keep]], t[keep], s[keep]])
    fixed = np.array([1, 0, 0])

    def f(b, x):
        return b[0] + b[1] * x[0] + b[2] * x[1] + b[3] * x[2]

    def by_b(b, x):
        return np.stack([np.ones_like(x[0]), x[0], x[1], x[2]])

    def by_x(b, x):
        return np.repeat(b[1:4, None], x.shape[1], axis=1)

    wd = np.stack([uy[at[keep]] ** -2, np.ones_like(raw[keep]), np.ones_like(raw[keep])])
    data = odr.Data(x, raw[keep], wd=wd, we=u[keep] ** -2)
    return odr.ODR(data, model(f, by_b, by_x), beta0=start(keep), ifixx=fixed).run()


def best(work, rounds=9, times=20):
    least = float("inf")
    for _ in range(rounds):
        begin = time.process_time()
        for _ in range(times):
            work()
        least = min(least, (time.process_time() - begin) / times)
    return least * 1e3


def main():
    everything = np.ones(len(raw), bool)
    global derivatives
    for derivatives, way in [(d, w) for d in (False, True) for w in (responses, parameters, each_reading, inputs)]:
        b = way(everything).beta
        line = f"{way.__name__}, {'derivatives given' if derivatives else 'by differences'}: {best(lambda: values(way(everything).beta)):.3f} ms"
        if "--leave-out" in sys.argv:
            def all_of_them():
                values(way(everything).beta)
                for k in range(len(y)):
                    way(at != k)
            line += f", with left-out anchors {best(all_of_them, 5, 5):.3f} ms"
        print(line, "intercept, slope, drift, size:", *(repr(float(x)) for x in b[:4]), "first sample:", repr(float(values(b)[0])))


if __name__ == "__main__":
    main()
