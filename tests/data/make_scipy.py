"""Writes damped sparse problems solved by numpy and SciPy, that the tests compare with.

Run in this folder: python3 make_scipy.py

minimise over x:  sum_i (w_i (a_i x - b_i))^2 + strength^2 ||x - reference||^2

For each problem: <name>.npz (matrix), <name>_data.npy, <name>_sigma.npy (w = 1/sigma),
<name>_reference.npy, and models, one column per strength: <name>_dense.npy from numpy's lstsq on
the stacked system, <name>_lsqr.npy and <name>_lsmr.npy from SciPy's iterations.
"""

import sys

import numpy
import scipy
import scipy.sparse as sparse
from scipy.sparse.linalg import lsmr, lsqr

STRENGTHS = [3.0, 0.5, 0.05]


def problem(name, rows, columns, density, weighted, shifted, seed):
    draw = numpy.random.default_rng(seed)
    matrix = sparse.random(rows, columns, density=density, format="csr", random_state=draw,
                           data_rvs=draw.standard_normal)
    data = matrix @ numpy.sin(numpy.arange(columns)) + 0.1 * draw.standard_normal(rows)
    sigma = draw.uniform(0.05, 0.5, rows) if weighted else numpy.ones(rows)
    reference = draw.standard_normal(columns) if shifted else numpy.zeros(columns)

    weights = sparse.diags(1 / sigma)
    scaled = (weights @ matrix).tocsr()
    right = (data - matrix @ reference) / sigma
    models = {"dense": [], "lsqr": [], "lsmr": []}
    for strength in STRENGTHS:
        stacked = numpy.vstack([scaled.toarray(), strength * numpy.eye(columns)])
        below = numpy.concatenate([right, numpy.zeros(columns)])
        models["dense"].append(numpy.linalg.lstsq(stacked, below, rcond=None)[0])
        exact = dict(atol=1e-15, btol=1e-15, conlim=0)
        models["lsqr"].append(lsqr(scaled, right, damp=strength, iter_lim=4000, **exact)[0])
        models["lsmr"].append(lsmr(scaled, right, damp=strength, maxiter=4000, **exact)[0])
    sparse.save_npz(f"scipy/{name}.npz", matrix)
    numpy.save(f"scipy/{name}_data.npy", data)
    numpy.save(f"scipy/{name}_sigma.npy", sigma)
    numpy.save(f"scipy/{name}_reference.npy", reference)
    for way, list_ in models.items():
        found = numpy.array(list_).T + reference[:, None]
        numpy.save(f"scipy/{name}_{way}.npy", found)
        apart = numpy.linalg.norm(found - reference[:, None] - numpy.array(models["dense"]).T)
        print(name, way, "apart from dense:", apart / numpy.linalg.norm(found))


if __name__ == "__main__":
    print("python", sys.version.split()[0], "numpy", numpy.__version__, "scipy", scipy.__version__)
    problem("tall", 120, 50, 0.08, weighted=False, shifted=False, seed=1)
    problem("weighted", 90, 60, 0.07, weighted=True, shifted=False, seed=2)
    problem("shifted", 90, 60, 0.07, weighted=True, shifted=True, seed=3)
    problem("wide", 40, 100, 0.08, weighted=True, shifted=True, seed=4)
