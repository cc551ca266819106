# SPDX-License-Identifier: MIT
"""Batches: two workers over one, a Dask cluster on loopback over local processes, and runs that are killed.

python tests/benchmarks/bench_batch.py [speed] [kill] [--comparisons 4] [--points 60000] [--plain]
    [--kills 50] [--kill-points 4000] [--seed 0]

Machines are noisy: take the ratios, and run it on an idle one.
"""

import argparse
import contextlib
import importlib
import json
import os
import random
import re
import runpy
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections import Counter
from pathlib import Path

import laspy
import numpy as np

from scanstrain.batch import run_batch
from scanstrain.config import load_config
from scanstrain.program import identity

machine = runpy.run_path(str(Path(__file__).with_name("bench_machine.py")))["machine"]
PROGRAM = [sys.executable, "-m", "scanstrain"]
ONE_THREAD = dict.fromkeys(("NUMBA_NUM_THREADS", "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"), "1")
DENSITY = 10_000
"""Points per square metre."""


def write_scan(path, points, seed):
    """A textured wall with a gentle relief; every second epoch has a small bulge."""
    rng = np.random.default_rng(seed)
    length = np.sqrt(points / DENSITY / 0.7)
    x, z = rng.uniform(0, length, points), rng.uniform(0, 0.7 * length, points)
    bulge = 3e-3 * (seed % 2) * np.exp(-((x - length / 2) ** 2 + (z - 0.3) ** 2) / 0.05)
    las = laspy.LasData(laspy.LasHeader(point_format=6, version="1.4"))
    las.header.scales, las.header.offsets = [1e-5] * 3, [482310.0, 5391270.0, 100.0]
    las.x, las.z = x + 482310.0, z + 100.0
    las.y = 0.05 * np.sin(2 * x) * np.cos(3 * z) + bulge + 5391270.0 + rng.normal(0, 1e-3, points)
    las.intensity = 2000 + 800 * np.sin(9 * x + 2 * z) * np.cos(7 * z - 3 * x) + rng.normal(0, 40, points)
    las.write(path)


def write_batch(folder, comparisons, points, *, report):
    lines = [f'[output]\nfolder = "results"\nreport = {json.dumps(report)}', '[strain]\nstructure = "wall"',
             "[neighbourhood]\ngauge_length = 0.3"]  # fmt: skip
    for number in range(comparisons + 1):
        write_scan(folder / f"{number}.laz", points, number)
        lines.append(f'[[epoch]]\nlabel = "e{number}"\nfile = "{number}.laz"')
    path = folder / "job.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    return path


def timed(job, *arguments, env=None):
    start = time.perf_counter()
    command = [*PROGRAM, "run", str(job), "--fresh", "--quiet", *arguments]
    subprocess.run(command, check=True, env={**os.environ, **(env or {})})
    return time.perf_counter() - start


@contextlib.contextmanager
def cluster(workers):
    with socket.socket() as found:
        found.bind(("127.0.0.1", 0))
        port = found.getsockname()[1]
    address = f"tcp://127.0.0.1:{port}"
    dask = [sys.executable, "-m", "dask"]
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
    started = [
        subprocess.Popen([*dask, "scheduler", "--host", "127.0.0.1", "--port", str(port), "--no-dashboard"], **quiet)
    ]
    started += [
        subprocess.Popen(
            [*dask, "worker", address, "--nthreads", "1", "--no-dashboard", "--no-nanny", "--host", "127.0.0.1"],
            **quiet,
        )
        for _ in range(workers)
    ]
    try:
        yield address, started
    finally:
        for process in reversed(started):
            process.terminate()
            process.wait()


SECONDS = re.compile(r'<tr><th scope=row>[\w -]+</th><td class="n" data-sort="[\d.e-]+">[\d.]+ s</td>|Together [^<]*')
"""Rows of the times in a report, and their sum."""


def bench_speed(folder, comparisons, points, *, report):
    job = write_batch(folder, comparisons, points, report=report)
    timed(job, "--only", "e1")  # compiles
    one = timed(job, "--workers", "1", env=ONE_THREAD)
    threads = timed(job, "--workers", "1")
    two = timed(job, "--workers", "2")
    wanted = results(folder / "results")
    with cluster(2) as (address, started):
        timed(job, "--scheduler", address, "--only", "e1")  # the workers load everything
        far = timed(job, "--scheduler", address)
        same = results(folder / "results") == wanted
        killer = threading.Timer(far / 2, started[-1].kill)
        killer.start()
        alone = timed(job, "--scheduler", address)
        same_alone = results(folder / "results") == wanted
    print(f"{comparisons} comparisons of 2 x {points} points, report {'included' if report else 'left out'}")
    print(f"  one process, one thread      {one:7.1f} s")
    print(f"  one process, all threads     {threads:7.1f} s")
    print(
        f"  two processes                {two:7.1f} s   {one / two:.2f} x one thread, {threads / two:.2f} x all threads"
    )
    print(
        f"  Dask on loopback, 2 workers  {far:7.1f} s   {far / two:.2f} x the time of two processes, same bytes: {same}"
    )
    print(f"  one of them killed midway    {alone:7.1f} s   same bytes: {same_alone}")


def results(folder):
    """Bytes of all results; of the summary and the report all but times and memory."""
    found = {}
    for path in sorted(folder.glob("*/*")):
        if path.name == "summary.json":
            content = json.loads(path.read_text(encoding="utf-8"))
            del content["timing"]
            found[path.relative_to(folder)] = content
        elif path.name == "report.html":
            found[path.relative_to(folder)] = SECONDS.sub("", path.read_text(encoding="utf-8"))
        elif path.is_file() and path.name != "manifest.json":
            found[path.relative_to(folder)] = path.read_bytes()
    return found


def begun(job, told):
    """Run a batch in a process of its own, which has everything loaded and nothing computed; its state goes to a file.

    A fork spares a second run the seconds in which nothing happens that a kill could hurt.
    """
    number = os.fork()
    if number == 0:
        code = 1
        try:
            (outcome,) = run_batch(load_config(job))
            told.write_text(outcome.state if outcome.up_to_date else ", ".join(outcome.taken) or "nothing")
            code = 0 if outcome.done else 1
        finally:
            os._exit(code)
    return number


def bench_kill(folder, kills, points, seed):
    for name in ("pipeline", "outputs", "stages", "registration", "neighbourhood", "strain", "structures"):
        importlib.import_module(f"scanstrain.{name}")
    identity()
    job, told = write_batch(folder, 1, points, report=False), folder / "told"
    for _ in range(2):  # the first one compiles
        shutil.rmtree(folder / "results", ignore_errors=True)
        start = time.perf_counter()
        os.waitpid(begun(job, told), 0)
        took = time.perf_counter() - start
    wanted = results(folder / "results")
    rng, same, resumed = random.Random(seed), 0, Counter()
    for number in range(kills):
        shutil.rmtree(folder / "results")
        process = begun(job, told)
        time.sleep(rng.uniform(0.0, took))
        os.kill(process, signal.SIGKILL)
        os.waitpid(process, 0)
        _, status = os.waitpid(begun(job, told), 0)
        resumed[told.read_text()] += 1
        left = [path.name for path in (*folder.rglob("*.part*"), *folder.glob(".results.lock"))]
        equal = status == 0 and results(folder / "results") == wanted and not left
        same += equal
        print(
            f"  {number + 1}: resumed from {told.read_text()}{'' if equal else f', DIFFERS, left {left}'}", flush=True
        )
    print(
        f"killed {kills} times within {took:.1f} s and resumed: {same} of {kills} identical; "
        f"resumed from {dict(resumed)}"
    )


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("parts", nargs="*", default=["speed", "kill"])
    parser.add_argument("--comparisons", type=int, default=4)
    parser.add_argument("--points", type=int, default=60_000)
    parser.add_argument("--kills", type=int, default=50)
    parser.add_argument("--kill-points", type=int, default=4_000)
    parser.add_argument("--plain", action="store_true", help="without report.html")
    parser.add_argument("--seed", type=int, default=0)
    given = parser.parse_args()
    print(machine(), flush=True)
    with tempfile.TemporaryDirectory() as folder:
        if "speed" in given.parts:
            place = Path(folder, "speed")
            place.mkdir()
            bench_speed(place, given.comparisons, given.points, report=not given.plain)
        if "kill" in given.parts:
            place = Path(folder, "kill")
            place.mkdir()
            bench_kill(place, given.kills, given.kill_points, given.seed)


if __name__ == "__main__":
    main()
