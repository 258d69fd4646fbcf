"""The few routines of Intel's MKL that the comparison needs, through ctypes: 32-bit indices."""

import ctypes
import ctypes.util
import glob
import importlib.metadata
import os
import site
import sys

INDEX_BASE_ZERO = 0
NOT_TRANSPOSED = 10
GENERAL = 20
# Far more than any run asks for: the inspection is meant to be worth its time.
EXPECTED_CALLS = 100_000

LP64 = 0
INTEL_THREADS = 0


class Description(ctypes.Structure):
    """struct matrix_descr; of a general matrix only the type is read."""

    _fields_ = [("type", ctypes.c_int), ("mode", ctypes.c_int), ("diagonal", ctypes.c_int)]


class Library:
    def __init__(self, threads):
        self.code = ctypes.CDLL(find(), mode=ctypes.RTLD_GLOBAL)
        self.code.MKL_Set_Interface_Layer(LP64)
        self.code.MKL_Set_Threading_Layer(INTEL_THREADS)
        self.code.MKL_Set_Dynamic(0)
        self.code.MKL_Set_Num_Threads(threads)
        self.threads = self.code.MKL_Get_Max_Threads()
        text = ctypes.create_string_buffer(200)
        self.code.MKL_Get_Version_String(text, len(text))
        self.version = text.value.decode().strip()
        self.description = Description(GENERAL, 0, 0)
        number, size, array = ctypes.c_double, ctypes.c_int, ctypes.c_void_p
        self.code.cblas_dnrm2.restype = number
        self.code.cblas_dnrm2.argtypes = [size, array, size]
        self.code.cblas_dscal.argtypes = [size, number, array, size]
        self.code.cblas_daxpby.argtypes = [size, number, array, size, number, array, size]
        self.code.mkl_sparse_d_mv.argtypes = [
            size, number, array, Description, array, number, array,
        ]

    def inspected(self, a):
        """A handle of the matrix, optimised for many products; its arrays must outlive it."""
        handle = ctypes.c_void_p()
        start = a.indptr.ctypes.data
        pointers = (start, start + a.indptr.itemsize, a.indices.ctypes.data, a.data.ctypes.data)
        must(
            self.code.mkl_sparse_d_create_csr(
                ctypes.byref(handle), INDEX_BASE_ZERO, a.shape[0], a.shape[1],
                *map(ctypes.c_void_p, pointers),
            )
        )
        must(
            self.code.mkl_sparse_set_mv_hint(
                handle, NOT_TRANSPOSED, self.description, EXPECTED_CALLS
            )
        )
        must(self.code.mkl_sparse_optimize(handle))
        return handle

    def product(self, handle, x, keep, y):
        """y <- A x + keep y"""
        must(
            self.code.mkl_sparse_d_mv(
                NOT_TRANSPOSED, 1.0, handle, self.description, x.ctypes.data, keep, y.ctypes.data
            )
        )

    def norm(self, x):
        return self.code.cblas_dnrm2(x.size, x.ctypes.data, 1)

    def scale(self, factor, x):
        self.code.cblas_dscal(x.size, factor, x.ctypes.data, 1)

    def combine(self, factor, x, keep, y):
        """y <- factor x + keep y"""
        self.code.cblas_daxpby(x.size, factor, x.ctypes.data, 1, keep, y.ctypes.data, 1)


def kernels():
    """Files of MKL in use: which instruction set it chose for this processor is in their names."""
    with open("/proc/self/maps") as maps:
        paths = {line.split()[-1] for line in maps if "libmkl_" in line}
    return sorted(os.path.basename(path) for path in paths)


def must(status):
    if status != 0:
        sys.exit(f"mkl: status {status}")


def find():
    """Path of libmkl_rt: as pip recorded it, else below the usual prefixes."""
    for path in candidates():
        if os.path.exists(path):
            return path
    sys.exit("mkl: no libmkl_rt found; python3 -m pip install mkl")


def candidates():
    try:
        for file in importlib.metadata.files("mkl") or []:
            if file.name.startswith("libmkl_rt.so"):
                yield str(file.locate())
    except importlib.metadata.PackageNotFoundError:
        pass
    prefixes = [os.environ.get("MKLROOT", ""), sys.prefix, sys.base_prefix, site.getuserbase()]
    for prefix in filter(None, prefixes):
        yield from glob.glob(os.path.join(prefix, "lib*", "**", "libmkl_rt.so*"), recursive=True)
    named = ctypes.util.find_library("mkl_rt")
    if named:
        yield named
