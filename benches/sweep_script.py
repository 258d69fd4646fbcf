#!/usr/bin/env python3
"""A sweep of strengths as a practitioner would script it with SciPy, to compare Ellbow with.

    python3 benches/sweep_script.py MATRIX.mtx DATA.npy --sigma S --strengths FROM..TO --count N
        --gradient T [--only-first K] [--cold] [--threads P] [--out MODEL.npy]

To install (used: Python 3.11, numpy 2.4.6, scipy 1.17.1); not part of the tests:

    python3 -m pip install numpy scipy

It reads A and b, weights both by w = 1/S, minimises ||w(Ax - b)||^2 + lambda^2 ||x||^2 with
scipy.sparse.linalg.lsqr for N values of lambda evenly spaced in their logarithm, strongest first,
chooses one by the noise level and writes its model. One line of JSON tells the seconds of each phase and
strength; progress goes to the standard error.

Every strength is solved until its *relative gradient*, recomputed from its definition, is at most T:

    ||A'w^2 (b - Ax) - lambda^2 x|| / (||[wA; lambda I]||_F ||[w(b - Ax); lambda x]||)

lsqr stops by the same quotient, except that it estimates the Frobenius norm from its own
coefficients, too small by a factor that would make it iterate longer than T asks for. So its tolerance is
T times that factor, foreseen from the strengths before. Where the recomputed gradient is above T all the
same, it goes on from the model it has.

Each strength starts from the model of the one before, which saved a fifth to a third of the iterations in
a trial of 32 strengths over two decades; --cold starts each from zero instead. Starting anywhere else than
from zero takes the stacked system [wA; lambda I], because lsqr's own damping pulls towards the start.

--only-first K times K strengths evenly picked from the N and extrapolates; the output says so. So that
they start as in the full list, the one before each is solved too, and not counted.
"""

import argparse
import json
import math
import os
import sys
import time

# numpy's norms of vectors share threads that wait for each other: nothing to gain beside products
# with a large matrix, but twenty times slower iterations were seen on a machine busy with other work.
# Said before numpy is loaded; whoever sets it otherwise is obeyed.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy  # noqa: E402
import scipy.io  # noqa: E402
import scipy.sparse  # noqa: E402
import scipy.sparse.linalg  # noqa: E402

ITERATIONS_MAX = 1_000_000
RUNS_MAX = 20


def main():
    options = parse()
    seconds = {}
    # SciPy's reader is multithreaded; threadpoolctl's `threadpool_limits` sets this variable too.
    scipy.io._fast_matrix_market.PARALLELISM = options.threads
    with timed(seconds, "read"):
        a = scipy.io.mmread(options.matrix)
        b = numpy.load(options.data).astype(float).ravel()
    with timed(seconds, "convert"):
        a = a.tocsr().astype(float, copy=False)
    if b.size != a.shape[0]:
        sys.exit(f"{options.data}: {b.size} data for {a.shape[0]} rows")
    with timed(seconds, "weight"):
        a.data /= options.sigma
        b = b / options.sigma
    problem = Problem(a, b, options.gradient)

    strengths = numpy.geomspace(max(options.strengths), min(options.strengths), options.count)
    picked = picks(options.count, options.only_first)
    records, models = solve_all(problem, strengths, picked, options.cold)
    seconds["solve"] = sum(record["seconds"] for record in records)
    with timed(seconds, "choose"):
        chosen, note = by_noise_level(records, b.size)
    with timed(seconds, "write"):
        numpy.save(options.out, models[chosen])

    seconds["total"] = sum(seconds.values())
    print(json.dumps({
        "rows": a.shape[0], "columns": a.shape[1], "entries": int(a.nnz), "seconds": seconds,
        **extrapolated(seconds, records, picked, options.count),
        "strengths": records, "chosen": records[chosen]["strength"], "note": note,
        "all_reached": all(record["reached"] for record in records),
        "cold": options.cold, "threads": options.threads,
        "load_average": os.getloadavg()[0], "scipy": scipy.__version__, "numpy": numpy.__version__,
    }))


def solve_all(problem, strengths, picked, cold):
    """Records and models of the picked places, each started as if all were solved."""
    records, models, x, solved = [], [], None, None
    for place in picked:
        if place > 0 and solved != place - 1 and not cold:
            x = problem.solve(strengths[place - 1], x)[1]
        record, x = problem.solve(strengths[place], None if cold else x)
        solved = place
        records.append(record)
        models.append(x)
        print(json.dumps(record), file=sys.stderr, flush=True)
    return records, models


class Problem:
    """The weighted system, and what lsqr's estimates showed so far."""

    def __init__(self, a, b, gradient):
        # Beforehand, because lsqr would copy the matrix for its transposed product each time.
        self.operator = scipy.sparse.linalg.aslinearoperator(a)
        self.shape = a.shape
        self.b = b
        self.gradient = gradient
        self.square = float(numpy.dot(a.data, a.data))
        # lsqr's estimates of the Frobenius norm at the end of the last two strengths.
        self.estimates = []

    def frobenius(self, strength):
        return math.sqrt(self.square + self.shape[1] * strength**2)

    def solve(self, strength, x=None):
        """From x, or from zero with lsqr's damping; again until the gradient is reached."""
        start = time.perf_counter()
        tolerance, runs, iterations = self.tolerance(strength), 0, 0
        while runs < RUNS_MAX:
            found = self.run(strength, x, tolerance)
            x, runs, iterations = found[0], runs + 1, iterations + found[2]
            if runs == 1:
                self.estimates = [*self.estimates[-1:], found[5]]
            record = self.certified(strength, x)
            if record["relative_gradient"] <= self.gradient:
                break
            # Halved in case lsqr's estimate is above the true norm.
            tolerance = min(tolerance, 2 * self.gradient) / 2
        record.update(
            seconds=time.perf_counter() - start, iterations=iterations, runs=runs,
            reached=record["relative_gradient"] <= self.gradient,
        )
        return record, x

    def run(self, strength, x, tolerance):
        limits = {"atol": tolerance, "btol": 0, "conlim": 0, "iter_lim": ITERATIONS_MAX}
        if x is None:
            return scipy.sparse.linalg.lsqr(self.operator, self.b, damp=strength, **limits)
        data = numpy.concatenate([self.b, numpy.zeros(x.size)])
        return scipy.sparse.linalg.lsqr(self.stacked(strength), data, x0=x, **limits)

    def tolerance(self, strength):
        """T times true norm by estimated norm. The estimate grows with the iterations, and those
        with every weaker strength: it is taken to grow as it did last time. Never below T."""
        if not self.estimates:
            return self.gradient
        last = self.estimates[-1]
        growth = max(1.0, last / self.estimates[0])
        return self.gradient * max(1.0, self.frobenius(strength) / (last * growth))

    def stacked(self, strength):
        m, n = self.shape
        return scipy.sparse.linalg.LinearOperator(
            (m + n, n), dtype=float,
            matvec=lambda x: numpy.concatenate([self.operator.matvec(x), strength * x]),
            rmatvec=lambda r: self.operator.rmatvec(r[:m]) + strength * r[m:],
        )

    def certified(self, strength, x):
        """Norms and relative gradient from their definitions: one product with A, one with A'."""
        r = self.b - self.operator.matvec(x)
        gradient = numpy.linalg.norm(self.operator.rmatvec(r) - strength**2 * x)
        residual_norm, penalty_norm = float(numpy.linalg.norm(r)), float(numpy.linalg.norm(x))
        scale = self.frobenius(strength) * math.hypot(residual_norm, strength * penalty_norm)
        return {
            "strength": float(strength), "residual_norm": residual_norm,
            "penalty_norm": penalty_norm, "relative_gradient": float(gradient) / scale,
        }


def picks(count, only):
    """Places in the list, both ends among them; the middle one if there is but one."""
    if only is None or only >= count:
        return list(range(count))
    if only == 1:
        return [count // 2]
    return [round(k * (count - 1) / (only - 1)) for k in range(only)]


def extrapolated(seconds, records, picked, count):
    """Nothing if all strengths were solved; else what all would have taken, drawing straight
    lines between the solved ones."""
    if len(picked) == count:
        return {"extrapolated": False}
    times = numpy.interp(range(count), picked, [record["seconds"] for record in records])
    total = seconds["total"] - seconds["solve"] + float(times.sum())
    text = (f"EXTRAPOLATED: {len(picked)} of {count} strengths were solved; all would have taken "
            f"about {total:.1f} s")
    print(text, file=sys.stderr)
    return {"extrapolated": True, "extrapolated_total_seconds": total, "extrapolation": text}


def by_noise_level(records, m):
    """The strongest whose squared residual norm is at most the number of data; else the weakest."""
    for place, record in enumerate(records):
        if record["residual_norm"] ** 2 <= m:
            return place, "strongest that fits the data to their uncertainty"
    return len(records) - 1, "none fits the data to their uncertainty; the weakest"


class timed:
    """Adds the seconds of a block under a name."""

    def __init__(self, seconds, name):
        self.seconds, self.name = seconds, name

    def __enter__(self):
        self.start = time.perf_counter()

    def __exit__(self, *_):
        self.seconds[self.name] = time.perf_counter() - self.start


def span(text):
    ends = [float(end) for end in text.split("..")]
    if len(ends) != 2 or not all(0 < end < math.inf for end in ends):
        raise argparse.ArgumentTypeError("FROM..TO, both above 0")
    return ends


def positive(text):
    value = float(text)
    if not 0 < value < math.inf:
        raise argparse.ArgumentTypeError("above 0")
    return value


def parse():
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("matrix", metavar="MATRIX.mtx")
    parser.add_argument("data", metavar="DATA.npy")
    parser.add_argument("--sigma", type=positive, required=True)
    parser.add_argument("--strengths", type=span, required=True, metavar="FROM..TO")
    parser.add_argument("--count", type=int, required=True)
    parser.add_argument("--gradient", type=positive, required=True)
    parser.add_argument("--only-first", type=int, metavar="K")
    parser.add_argument("--threads", type=int, default=os.cpu_count(), metavar="P")
    parser.add_argument("--cold", action="store_true")
    parser.add_argument("--out", default="model.npy", metavar="MODEL.npy")
    options = parser.parse_args()
    if min(options.count, options.threads, options.only_first or 1) < 1 or options.only_first == 0:
        parser.error("--count, --threads and --only-first are at least 1")
    return options


if __name__ == "__main__":
    main()
