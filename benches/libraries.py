#!/usr/bin/env python3
"""Times general-purpose libraries and Ellbow on one saved system, in one run, in turns.

    python3 benches/libraries.py SYSTEM.npz [--rounds R] [--threads T] [--lanes 1,8,16]
        [--entry MATRIX.mtx] [--skip NAME]... [--ours CMD] [--ours-load CMD] [--json FILE]

To install what it compares with (used: Python 3.11, numpy 2.4.6, scipy 1.17.1, mkl 2026.2.1, gcc 12.2):

    python3 -m pip install numpy scipy mkl

and a C compiler called cc with OpenMP. What is missing is left out; the script then fails at its
end. Linux only: memory is read from /proc. Not part of the tests.
SYSTEM.npz is what scipy.sparse.save_npz writes; `cargo bench --bench systems -- parallel-512 DIR`
makes one.

One iteration, for everyone: u <- A v - alpha u, s <- A' u, with the norms and updates of LSQR.

| name | contender |
|---|---|
| scipy | scipy.sparse.linalg.lsqr: difference of two runs by difference of their iterations |
| mkl | MKL's inspected and optimised A and explicit transpose, MKL's vector routines |
| loop | C over compressed rows of A and of its transpose, OpenMP, cc -O3 -march=native |
| ours | `CMD --system SYSTEM.npz --lanes K --on-request` for each K of --lanes; once --precision single |
| read | no contender: reads 512 MiB once, to show what memory delivers |

Each is a process of its own; all are loaded before the first block and stay so; only one computes at
a time. In each round each does one block of iterations that takes about --block-seconds. Their arrays get
large pages where the kernel gives them, the libraries' too. Products and the first iterations of
`mkl` and `loop` are checked against SciPy's before they count.

Protocol: a process prints {"ready":true,"entries":..,...} once loaded; then for each line N read it makes
N iterations and prints {"iterations":N,"seconds":S}; other lines are passed on to the standard error.

Memory is VmRSS as seen from outside during the blocks, less what a library's process had before it
loaded the system (interpreter, numpy, scipy). From ours nothing is taken off.

--entry also times loading text to ready-to-solve: scipy.io.mmread + tocsr (T threads) against
`CMD`, which prints {"seconds":S}. Commands of ours run in the repository with RAYON_NUM_THREADS=T.
"""

import argparse
import json
import os
import platform
import shlex
import statistics
import subprocess
import sys
import tempfile
import time

HERE = os.path.dirname(os.path.abspath(__file__))
PARTS = os.path.join(HERE, "libraries")
sys.path.insert(0, PARTS)
sys.dont_write_bytecode = True

import memory  # noqa: E402
from process import Process, Trouble, last_record  # noqa: E402

CC = ["cc", "-O3", "-march=native", "-fopenmp", "-shared", "-fPIC"]
LIBRARIES = ("read", "scipy", "mkl", "loop")
# Threads of OpenMP go on spinning for up to 0.2 s after their work is done.
PAUSE_SECONDS = 0.3
left_out = []


def main():
    options = parse()
    print(f"{cpu_model()}, {os.cpu_count()} cores; {options.threads} threads; load average "
          f"{os.getloadavg()[0]:.2f}; Python {platform.python_version()}")
    with tempfile.TemporaryDirectory() as folder:
        contenders = []
        try:
            for name, command in commands(options, compiled(folder, options)):
                try:
                    contenders.append(Process(name, command, environment(options), root()))
                    print(f"  {contenders[-1]}", flush=True)
                except Trouble as trouble:
                    loud(f"{name} is left out: {trouble}")
            measure(contenders, options)
            print(f"load average at the end {os.getloadavg()[0]:.2f} (this run adds up to {options.threads})")
        finally:
            for contender in contenders:
                contender.end()
    report = {
        "cpu": cpu_model(), "threads": options.threads, "system": options.system,
        "contenders": table(contenders), "left_out": left_out,
    }
    if options.entry:
        report["loading"] = loading(options)
    if options.json:
        with open(options.json, "w") as file:
            json.dump(report, file, indent=1)
    if left_out:
        sys.exit("LEFT OUT:\n" + "\n".join(left_out))


def parse():
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("system", metavar="SYSTEM.npz", type=os.path.abspath)
    parser.add_argument("--entry", metavar="MATRIX.mtx", type=os.path.abspath)
    parser.add_argument("--rounds", type=int, default=9)
    parser.add_argument("--entry-rounds", type=int, default=3)
    parser.add_argument("--block-seconds", type=float, default=1.0)
    parser.add_argument("--threads", type=int, default=os.cpu_count())
    parser.add_argument("--lanes", default="1,8,16", type=lambda text: [*map(int, text.split(","))])
    parser.add_argument("--skip", action="append", default=[], choices=[*LIBRARIES, "ours"])
    parser.add_argument("--ours", default="cargo bench --bench pass --", metavar="CMD")
    parser.add_argument("--ours-load", metavar="CMD")
    parser.add_argument("--json", metavar="FILE")
    options = parser.parse_args()
    if min(options.rounds, options.entry_rounds, options.threads, *options.lanes) < 1:
        parser.error("rounds, threads and lanes are at least 1")
    return options


def root():
    return os.path.dirname(HERE)


def environment(options):
    """The same number of threads for everyone. Only numpy's norms of vectors keep to one: they gain
    nothing beside the products, and threads that wait for each other cost SciPy many times its
    iteration when anything else runs."""
    threads = {f"{name}_NUM_THREADS": str(options.threads) for name in ("OMP", "MKL", "RAYON")}
    return {**os.environ, **threads, "OPENBLAS_NUM_THREADS": "1", "MKL_DYNAMIC": "FALSE",
            "PYTHONDONTWRITEBYTECODE": "1"}


def compiled(folder, options):
    """The C code as a shared library; None, said loudly, where it cannot be had."""
    if {"loop", "read"} <= set(options.skip):
        return None
    shared = os.path.join(folder, "two_products.so")
    command = [*CC, "-o", shared, os.path.join(PARTS, "two_products.c"), "-lm"]
    try:
        subprocess.run(command, check=True)
    except (FileNotFoundError, subprocess.CalledProcessError) as error:
        loud(f"the C loop and the bandwidth of memory are left out: {error}")
        return None
    version = subprocess.run([CC[0], "--version"], capture_output=True, text=True).stdout
    print(f"compiled by {version.splitlines()[0]}: {' '.join(CC)}")
    return shared


def commands(options, shared):
    """Name and command of each process to start, in the order of their turns."""
    python = [sys.executable, os.path.join(PARTS, "contenders.py")]
    for name in LIBRARIES:
        if name in options.skip or (name in ("loop", "read") and shared is None):
            continue
        arguments = ["--system", options.system, "--threads", str(options.threads)]
        yield name, [*python, name, *arguments, *(["--shared", shared] if shared else [])]
    if "ours" in options.skip:
        return
    ours = [*shlex.split(options.ours), "--system", options.system, "--on-request"]
    for lanes in options.lanes:
        yield f"ours, {lanes} lane{'s' if lanes > 1 else ''}", [*ours, "--lanes", str(lanes)]
    yield "ours, 1 lane, single", [*ours, "--lanes", "1", "--precision", "single"]


def measure(contenders, options):
    """Finds how many iterations make a block, then lets everyone take turns."""
    take_turns(contenders, lambda contender: contender.choose_block(options.block_seconds))
    for turn in range(options.rounds):
        take_turns(contenders, Process.block)
        print(f"  round {turn + 1} of {options.rounds} done", file=sys.stderr)


def take_turns(contenders, task):
    """One task each; whoever fails leaves the list, and loudly."""
    for contender in list(contenders):
        try:
            task(contender)
        except Trouble as trouble:
            loud(f"{contender.name} is left out: {trouble}")
            contenders.remove(contender)
            contender.end()
        time.sleep(PAUSE_SECONDS)


def table(contenders):
    """Prints what was measured; the rows as records."""
    rows = list(map(summary, contenders))
    reading = next((row for row in rows if row["name"] == "read"), None)
    rows = [row for row in rows if row is not reading]
    mkl = next((row for row in rows if row["name"] == "mkl"), None)
    print(f"\n{'':24}{'ms/iteration':>13}{'min':>9}{'to MKL':>9}{'bytes/entry':>13}{'to MKL':>9}"
          f"{'its/block':>11}")
    for row in rows:
        time_ratio, memory_ratio = (
            (row[key] / mkl[key] if mkl else float("nan")) for key in ("ms", "bytes_per_entry")
        )
        print(f"{row['name']:24}{row['ms']:13.2f}{row['ms_min']:9.2f}{time_ratio:9.3f}"
              f"{row['bytes_per_entry']:13.1f}{memory_ratio:9.3f}{row['iterations_per_block']:11}")
        if mkl:
            row.update(ratio_to_mkl=time_ratio, memory_ratio_to_mkl=memory_ratio)
    if mkl and any("_def." in name for name in mkl["ready"]["about"].get("kernels", [])):
        print("MKL took its kernels for any processor (libmkl_def); on one of Intel's it may do better")
    if reading:
        show_bandwidth(reading, rows)
        rows.append(reading)
    return rows


def summary(contender):
    """Medians over the blocks of one contender."""
    ready = contender.ready
    resident = contender.resident_bytes_max - ready.get("baseline_bytes", 0)
    times = [1e3 * seconds for seconds in contender.seconds_per_iteration]
    return {
        "name": contender.name, "ms": statistics.median(times), "ms_min": min(times), "all_ms": times,
        "iterations_per_block": contender.iterations, "resident_bytes": resident,
        "bytes_per_entry": resident / ready["entries"] if "entries" in ready else None,
        "ready": ready,
    }


def show_bandwidth(reading, rows):
    gigabytes = reading["ready"]["about"]["bytes"] / reading["ms"] / 1e6
    reading["gigabytes_per_second"] = gigabytes
    best = gigabytes * reading["ms"] / reading["ms_min"]
    print(f"memory delivers {gigabytes:.1f} GB/s (median; best {best:.1f})")
    if rows:
        entries = rows[0]["ready"]["entries"]
        floors = ", ".join(f"{b} bytes {b * entries / gigabytes / 1e6:.1f} ms" for b in (24, 12, 10, 6))
        print(f"reading so much once for each of {entries} entries takes: {floors}")


def loading(options):
    """Seconds from text to ready-to-solve, in turns; the file is in the page cache for both."""
    with open(options.entry, "rb") as file:
        while file.read(1 << 24):
            pass
    ours = options.ours_load
    ours = shlex.split(ours) if ours else [
        *"cargo bench --bench load -- --json --file".split(), options.entry,
    ]
    contenders = {"scipy": [
        sys.executable, os.path.join(PARTS, "contenders.py"), "load", "--file", options.entry,
        "--threads", str(options.threads),
    ], "ours": ours}
    for name in set(options.skip) & set(contenders):
        del contenders[name]
    seconds = {name: [] for name in contenders}
    for _ in range(options.entry_rounds):
        for name in list(contenders):
            try:
                record = last_record(contenders[name], environment(options), root())
                seconds[name].append(record["seconds"])
            except Trouble as trouble:
                loud(f"loading by {name} is left out: {trouble}")
                del contenders[name]
    size = os.path.getsize(options.entry)
    medians = {name: statistics.median(found) for name, found in seconds.items() if found}
    print(f"\nloading {size / 1e6:.0f} MB of text, file in the page cache, {options.threads} threads "
          "(SciPy: scipy.io._fast_matrix_market.PARALLELISM)")
    for name, median in medians.items():
        against = f", {median / medians['scipy']:.3f} of SciPy's" if "scipy" in medians else ""
        print(f"{name:24}{median:9.2f} s {size / median / 1e6:9.0f} MB/s{against}")
    return {"bytes": size, "seconds": seconds, "medians": medians}


def cpu_model():
    with open("/proc/cpuinfo") as cpu:
        models = [line.split(":", 1)[1].strip() for line in cpu if line.startswith("model name")]
    return models[0] if models else platform.machine()


def loud(text):
    """Says what is missing now; it is said again at the end, and the script fails."""
    left_out.append(text)
    print(f"\n*** {text}\n", file=sys.stderr, flush=True)


if __name__ == "__main__":
    main()
