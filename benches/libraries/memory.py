"""Resident memory and large pages of processes, as Linux tells."""

import ctypes
import re

HUGE_PAGE_BYTES = 2 << 20
# Smaller mappings are stacks and the like, which would only be filled up with empty pages.
MAPPING_BYTES_MIN = 16 << 20
MADV_HUGEPAGE = 14
# Gives the pages at once instead of whenever the kernel gets to it; Linux 6.1.
MADV_COLLAPSE = 25


def resident_bytes(process="self"):
    """VmRSS; 0 for a process that has ended."""
    try:
        with open(f"/proc/{process}/status") as status:
            found = re.search(r"^VmRSS:\s+(\d+) kB", status.read(), re.MULTILINE)
    except (FileNotFoundError, ProcessLookupError):
        return 0
    return int(found[1]) << 10 if found else 0


def last_descendants(process):
    """Processes below this one (itself included) that have started no other: cargo and a shell
    wait for the one that works."""
    try:
        with open(f"/proc/{process}/task/{process}/children") as children:
            below = children.read().split()
    except (FileNotFoundError, ProcessLookupError):
        return []
    return [last for child in below for last in last_descendants(int(child))] or [process]


def advise_huge_pages():
    """Asks for large pages under every large anonymous mapping of this process, whoever made it,
    and returns how many bytes lie in such pages now."""
    libc = ctypes.CDLL(None, use_errno=True)
    libc.madvise.argtypes = [ctypes.c_void_p, ctypes.c_size_t, ctypes.c_int]
    with open("/proc/self/maps") as maps:
        lines = [line.split() for line in maps]
    for place, permissions, _, _, inode, *name in lines:
        if not permissions.startswith("rw") or inode != "0" or (name and name[0] == "[stack]"):
            continue
        start, end = (int(part, 16) for part in place.split("-"))
        if end - start < MAPPING_BYTES_MIN:
            continue
        start = -(-start // HUGE_PAGE_BYTES) * HUGE_PAGE_BYTES
        end = end // HUGE_PAGE_BYTES * HUGE_PAGE_BYTES
        if end > start:
            # Refusals are no error: advice that a kernel does not know costs speed only, and the
            # number returned below tells.
            libc.madvise(start, end - start, MADV_HUGEPAGE)
            libc.madvise(start, end - start, MADV_COLLAPSE)
    return huge_page_bytes()


def huge_page_bytes(process="self"):
    with open(f"/proc/{process}/smaps_rollup") as rollup:
        found = re.search(r"^AnonHugePages:\s+(\d+) kB", rollup.read(), re.MULTILINE)
    return int(found[1]) << 10 if found else 0
