"""Contenders of libraries.py, each in a process of its own.

    python3 contenders.py scipy|mkl|loop|read [--system SYSTEM.npz] [--threads T] [--shared FILE]
    python3 contenders.py load --file MATRIX.mtx [--threads T]

Protocol: one line of JSON once ready; then, for each line with a whole number N on the standard
input, N iterations and one line {"iterations":N,"seconds":S}; the end of the input ends it.
"""

import argparse
import ctypes
import json
import math
import sys
import time

import numpy
import scipy.sparse
import scipy.sparse.linalg

import memory
import mkl

ROUNDOFF = numpy.finfo(float).eps / 2
STEPS_CHECKED = 5


def load(path):
    """The system as 64-bit values under 32-bit indices, in compressed rows."""
    a = scipy.sparse.load_npz(path).tocsr().astype(numpy.float64, copy=False)
    a.sum_duplicates()
    if max(a.nnz, *a.shape) > numpy.iinfo(numpy.int32).max:
        sys.exit(f"{path}: too large for 32-bit indices")
    a.indices = a.indices.astype(numpy.int32, copy=False)
    a.indptr = a.indptr.astype(numpy.int32, copy=False)
    return a


def invented_data(a):
    """Data that no model explains, so that the process goes on for as long as it is asked to."""
    return numpy.random.default_rng(1).standard_normal(a.shape[0])


def check_product(name, a, x, found):
    """Any order of adding k products errs by at most k roundoffs of the sum of magnitudes, so
    two orders differ by at most twice that; 2 more are for fused or separate multiplication."""
    limit = 2 * (numpy.diff(a.indptr) + 2) * ROUNDOFF * (abs(a) @ abs(x))
    worst = numpy.max(abs(found - a @ x) - limit, initial=0.0)
    if not worst <= 0:
        sys.exit(f"{name}: a product is wrong by {worst} beyond rounding")


class Scipy:
    """scipy.sparse.linalg.lsqr with all tolerances 0. An iteration is what a longer run takes
    beyond one of a single iteration, divided by the iterations between. The operator is made
    beforehand, because lsqr would copy the whole matrix for the transposed product in every run."""

    def __init__(self, a, _):
        self.operator = scipy.sparse.linalg.aslinearoperator(a)
        # The operator keeps the copy from here on.
        self.operator.rmatvec(numpy.zeros(a.shape[0]))
        self.data = invented_data(a)
        self.about = {"scipy": scipy.__version__, "numpy": numpy.__version__}

    def run(self, iterations):
        start = time.perf_counter()
        done = scipy.sparse.linalg.lsqr(
            self.operator, self.data, atol=0, btol=0, conlim=0, iter_lim=iterations
        )[2]
        return done, time.perf_counter() - start

    def block(self, iterations):
        one, seconds_one = self.run(1)
        more, seconds_more = self.run(iterations + 1)
        if more <= one:
            sys.exit("scipy: lsqr ended after its first iteration; the system is too small")
        return more - one, seconds_more - seconds_one


class Process:
    """Two matrices, A and its explicit transpose, and the vectors of LSQR; `steps` goes on from
    where the last call ended."""

    def __init__(self, a):
        self.a = a
        self.transpose = a.T.tocsr()
        self.restart()

    def restart(self):
        u = invented_data(self.a)
        beta = numpy.linalg.norm(u)
        u /= beta
        v = self.transpose @ u
        alpha = numpy.linalg.norm(v)
        v /= alpha
        self.u, self.v, self.w = u, v, v.copy()
        self.x = numpy.zeros_like(v)
        # alpha, rho-bar, phi-bar
        self.scalars = numpy.array([alpha, alpha, beta])

    def check(self, name):
        """Both products against SciPy's, then the first models against those of its lsqr."""
        random = numpy.random.default_rng(2)
        for which, matrix in (("A", self.a), ("transpose", self.transpose)):
            x = random.standard_normal(matrix.shape[1])
            check_product(f"{name}, {which}", matrix, x, self.multiply(matrix, x))
        self.steps(STEPS_CHECKED)
        wanted = scipy.sparse.linalg.lsqr(
            self.a, invented_data(self.a), atol=0, btol=0, conlim=0, iter_lim=STEPS_CHECKED
        )[0]
        # Another order of adding moves a few steps by some thousand roundoffs; a wrong recurrence
        # shows in the leading digits.
        error = numpy.linalg.norm(self.x - wanted) / numpy.linalg.norm(wanted)
        if not error <= 1e-10:
            sys.exit(f"{name}: after {STEPS_CHECKED} iterations the model is off by {error}")
        self.restart()

    def block(self, iterations):
        start = time.perf_counter()
        self.steps(iterations)
        return iterations, time.perf_counter() - start


class Loop(Process):
    """The two-product loop of two_products.c."""

    def __init__(self, a, shared):
        self.code = ctypes.CDLL(shared)
        super().__init__(a)
        self.about = {"compiled": "two_products.c"}

    def multiply(self, a, x):
        y = numpy.zeros(a.shape[0])
        self.code.multiply(ctypes.c_int(a.shape[0]), *rows_of(a), address(x), address(y))
        return y

    def steps(self, count):
        m, n = self.a.shape
        vectors = (self.u, self.v, self.w, self.x, self.scalars)
        self.code.iterate(
            ctypes.c_long(count), ctypes.c_int(m), ctypes.c_int(n),
            *rows_of(self.a), *rows_of(self.transpose), *map(address, vectors),
        )


class Mkl(Process):
    """Sparse products of MKL after inspection, and its vector routines."""

    def __init__(self, a, threads):
        self.library = mkl.Library(threads)
        super().__init__(a)
        self.handles = [self.library.inspected(matrix) for matrix in (self.a, self.transpose)]
        self.about = {"mkl": self.library.version, "threads": self.library.threads}

    def check(self, name):
        super().check(name)
        # Loaded with the first product.
        self.about["kernels"] = mkl.kernels()

    def multiply(self, a, x):
        y = numpy.zeros(a.shape[0])
        self.library.product(self.handles[a is self.transpose], x, 0.0, y)
        return y

    def steps(self, count):
        forward, back = self.handles
        library, u, v, w, x = self.library, self.u, self.v, self.w, self.x
        alpha, rho_bar, phi_bar = map(float, self.scalars)
        for _ in range(count):
            library.product(forward, v, -alpha, u)
            beta = library.norm(u)
            library.scale(1 / beta, u)
            library.product(back, u, -beta, v)
            alpha = library.norm(v)
            library.scale(1 / alpha, v)
            rho = math.hypot(rho_bar, beta)
            c, s = rho_bar / rho, beta / rho
            theta, phi = s * alpha, c * phi_bar
            rho_bar, phi_bar = -c * alpha, s * phi_bar
            # x += (phi / rho) w;  w = v - (theta / rho) w
            library.combine(phi / rho, w, 1.0, x)
            library.combine(1.0, v, -theta / rho, w)
        self.scalars[:] = alpha, rho_bar, phi_bar


class Read:
    """A large array read once per "iteration" by all threads: what memory delivers."""

    def __init__(self, _, shared):
        self.code = ctypes.CDLL(shared)
        self.code.read_once.restype = ctypes.c_uint64
        # Ones, because untouched zeros all lie in the same page of memory.
        self.array = numpy.ones(1 << 26, dtype=numpy.uint64)
        self.about = {"bytes": self.array.nbytes}

    def block(self, iterations):
        start = time.perf_counter()
        for _ in range(iterations):
            total = self.code.read_once(ctypes.c_size_t(self.array.size), address(self.array))
            if total != self.array.size:
                sys.exit("read: the sum is wrong")
        return iterations, time.perf_counter() - start


def address(array):
    return ctypes.c_void_p(array.ctypes.data)


def rows_of(a):
    return address(a.indptr), address(a.indices), address(a.data)


def tell(**record):
    print(json.dumps(record), flush=True)


def serve(kind, path, extra):
    """Builds the contender, says that it is ready, and answers until the input ends."""
    before = memory.resident_bytes()
    a = None if kind is Read else load(path)
    contender = kind(a, extra)
    if isinstance(contender, Process):
        contender.check(kind.__name__.lower())
    # Everyone gets the same large pages, wherever the arrays came from.
    huge = memory.advise_huge_pages()
    size = {} if a is None else {"rows": a.shape[0], "columns": a.shape[1], "entries": int(a.nnz)}
    tell(
        ready=True, **size, resident_bytes=memory.resident_bytes() - before,
        baseline_bytes=before, huge_page_bytes=huge, about=contender.about,
    )
    for line in sys.stdin:
        iterations, seconds = contender.block(int(line))
        tell(iterations=iterations, seconds=seconds)


def time_loading(path, threads):
    """Matrix Market to compressed rows. SciPy's reader is multithreaded; the number is this
    variable of its module, which threadpoolctl's `threadpool_limits` sets too."""
    import scipy.io

    scipy.io._fast_matrix_market.PARALLELISM = threads
    start = time.perf_counter()
    a = scipy.io.mmread(path).tocsr()
    seconds = time.perf_counter() - start
    tell(seconds=seconds, rows=a.shape[0], columns=a.shape[1], entries=int(a.nnz))


def main():
    parser = argparse.ArgumentParser()
    parser.add_argument("kind", choices=["scipy", "mkl", "loop", "read", "load"])
    parser.add_argument("--system")
    parser.add_argument("--file")
    parser.add_argument("--shared")
    parser.add_argument("--threads", type=int, default=1)
    options = parser.parse_args()
    if options.kind == "load":
        return time_loading(options.file, options.threads)
    kind = {"scipy": Scipy, "mkl": Mkl, "loop": Loop, "read": Read}[options.kind]
    serve(kind, options.system, options.threads if kind is Mkl else options.shared)


if __name__ == "__main__":
    main()
