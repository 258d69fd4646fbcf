"""Writes the sparse matrices that the tests of SciPy's .npz format read.

Run in this folder: python3 make_npz.py
"""

import io
import zipfile

import numpy
import scipy
import scipy.sparse as sparse

# 4 x 5, a zero row, values that f32 cannot hold, one explicit zero.
ROWS = numpy.array([0, 0, 1, 3, 3, 3])
COLUMNS = numpy.array([4, 1, 2, 0, 3, 1])
VALUES = numpy.array([0.1, -2.5, 0.0, 7.0, 1e-3, 3.0])
COO = sparse.coo_matrix((VALUES, (ROWS, COLUMNS)), shape=(4, 5))


def unsorted_with_repeats():
    """CSR whose columns are neither sorted nor unique: row 1 holds column 2 three times."""
    pointers = numpy.array([0, 2, 6, 6], dtype=numpy.int64)
    columns = numpy.array([3, 0, 2, 1, 2, 2], dtype=numpy.int64)
    values = numpy.array([1.5, 2.0, 1e16, 4.0, 1.0, -1e16])
    return sparse.csr_matrix((values, columns, pointers), shape=(3, 4))


def members(path):
    with zipfile.ZipFile(path) as archive:
        return {name: archive.read(name) for name in archive.namelist()}


def rewrite(path, source, **changed):
    """Copies an archive with some members replaced by arrays."""
    content = members(source)
    for name, array in changed.items():
        out = io.BytesIO()
        numpy.save(out, array)
        content[name + ".npy"] = out.getvalue()
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, data in content.items():
            archive.writestr(name, data)


def main():
    sparse.save_npz("coo.npz", COO)
    sparse.save_npz("csr.npz", COO.tocsr())
    sparse.save_npz("csc.npz", COO.tocsc(), compressed=False)
    sparse.save_npz("csr_array_f4.npz", sparse.csr_array(COO.astype(numpy.float32)))
    sparse.save_npz("bool.npz", (COO != 0).tocsr())
    sparse.save_npz("unsorted.npz", unsorted_with_repeats())
    sparse.save_npz("bsr.npz", COO.tobsr())
    numpy.savez("dense.npz", a=COO.toarray())
    numpy.save("big_endian_fortran.npy", numpy.asfortranarray(COO.toarray()).astype(">f8"))
    numpy.save("objects.npy", numpy.array([1, "a"], dtype=object), allow_pickle=True)
    numpy.save("dates.npy", numpy.array(["2020-01-01"], dtype="M8[D]"))
    numpy.save("records.npy", numpy.zeros(3, dtype=[("a", "f8"), ("b", "i4")]))

    rewrite("column_beyond.npz", "csr.npz", indices=numpy.array([1, 5, 2, 0, 1, 3]))
    rewrite("column_negative.npz", "csr.npz", indices=numpy.array([1, 4, 2, 0, -1, 3]))
    rewrite("row_beyond.npz", "coo.npz", row=numpy.array([0, 0, 1, 3, 4, 3]))
    rewrite("pointers_fall.npz", "csr.npz", indptr=numpy.array([0, 3, 2, 3, 6]))
    rewrite("pointers_end.npz", "csr.npz", indptr=numpy.array([0, 2, 3, 3, 5]))
    rewrite("pointers_start.npz", "csr.npz", indptr=numpy.array([1, 2, 3, 3, 6]))
    rewrite("pointers_short.npz", "csr.npz", indptr=numpy.array([0, 2, 6]))
    rewrite("indices_short.npz", "csr.npz", indices=numpy.array([1, 4, 2]))
    rewrite("indices_float.npz", "csr.npz", indices=numpy.array([1.0, 4, 2, 0, 1, 3]))
    rewrite("shape_huge.npz", "csr.npz", shape=numpy.array([2**40, 5]))
    rewrite("nan.npz", "csr.npz", data=numpy.array([1, 2, 3, numpy.nan, 5, 6.0]))
    with zipfile.ZipFile("twice.npz", "w") as archive:
        for name, data in members("csr.npz").items():
            archive.writestr(name, data)
        archive.writestr("data.npy", members("csr.npz")["data.npy"])
    print("numpy", numpy.__version__, "scipy", scipy.__version__)


if __name__ == "__main__":
    main()
