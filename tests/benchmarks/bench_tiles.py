# SPDX-License-Identifier: MIT
"""Memory and throughput of a comparison in tiles, against one of a million points in one piece.

    python tests/benchmarks/bench_tiles.py [--points 5000000] [--tile-points N] [--gauge 0.6] [--spacing 0.15] [--alone]

Writes a pair of LAZ files by a stream, segment by segment, compares them in a process of its own and watches the
memory of that process and of all that it starts: anonymous memory, and resident memory, which counts pages of files
as well. `--alone` leaves the run of a million points out. A first run on small clouds compiles and is not counted.
"""

from __future__ import annotations

import argparse
import json
import runpy
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import laspy
import numpy as np

from scanstrain.synthetic import Lining, RandomField, Scene, Sum, Windowed, sample_epoch
from scanstrain.synthetic.deformation import Ovalisation

HERE = Path(__file__).parent
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
ORIGIN = np.array([482310.0, 5391270.0, 86.0])
SPACING, RADIUS, SEGMENT = 0.008, 2.0, 1_000_000
PAUSE = 0.2
"""Seconds between two looks at the memory."""

RUN = """
import json, sys, time
from pathlib import Path
from scanstrain.batch import compare_to_folder
from scanstrain.config import config_from_options
folder, out, options = Path(sys.argv[1]), Path(sys.argv[2]), json.loads(sys.argv[3])
begin, cpu = time.perf_counter(), time.process_time()
summary = compare_to_folder(folder / "a.laz", folder / "b.laz", config_from_options(options), out, assume_same_crs=True)
print(json.dumps({"total": time.perf_counter() - begin, "cpu": time.process_time() - cpu,
                  "stages": summary["timing"], "gauges": summary["gauges"]["count"]}))
"""


def write_pair(folder, points):
    """Two epochs of a lining of about `points` points each, segment by segment along the tunnel."""
    folder.mkdir()
    segments = max(1, round(points / SEGMENT))
    length = points / segments * SPACING**2 / (2 * np.pi * RADIUS)
    extent = (2 * np.pi * RADIUS, length)
    header = laspy.LasHeader(version="1.4", point_format=6)
    header.scales, header.offsets = np.full(3, 1e-4), ORIGIN
    for name, deformed in (("a", False), ("b", True)):
        with laspy.open(folder / f"{name}.laz", "w", header=header) as stream:
            for k in range(segments):
                scene = Scene(
                    Lining(RADIUS, length),
                    Sum((Windowed(Ovalisation(0.004), (-np.inf, 0.2 * length), (np.inf, 0.7 * length), (1.0, 0.7)),)),
                    relief=RandomField(extent, rms=1e-3, correlation_length=0.05, seed=1 + 2 * k),
                    texture=RandomField(extent, rms=0.18, correlation_length=0.04, seed=2 + 2 * k),
                )  # fmt: skip
                epoch = sample_epoch(scene, deformed=deformed, spacing=SPACING, intensity_noise=30.0,
                                     seed=10 + 2 * k + deformed)  # fmt: skip
                record = laspy.ScaleAwarePointRecord.zeros(len(epoch), header=header)
                record.x, record.y, record.z = (epoch.points + ORIGIN + np.array([0.0, k * length, 0.0])).T
                record.intensity = np.clip(np.round(epoch.intensity), 0, 65535).astype(np.uint16)
                record.return_number = record.number_of_returns = np.ones(len(epoch), np.uint8)
                stream.write_points(record)
    with laspy.open(folder / "a.laz") as stream:
        return stream.header.point_count


def memory_of(pid):
    """Resident and anonymous memory of a process and its descendants [MB], 0 for what is gone."""
    total = np.zeros(2)
    try:
        status = Path(f"/proc/{pid}/status").read_text(encoding="ascii")
        children = [Path(f"/proc/{pid}/task/{task.name}/children").read_text(encoding="ascii").split()
                    for task in Path(f"/proc/{pid}/task").iterdir()]  # fmt: skip
    except OSError:
        return total
    for row in status.splitlines():
        for k, key in enumerate(("VmRSS:", "RssAnon:")):
            if row.startswith(key):
                total[k] += int(row.split()[1]) / 1024
    return total + sum(memory_of(int(child)) for each in children for child in each)


def run(folder, options):
    """Compare in a process of its own; return its numbers and the peaks of memory."""
    with tempfile.TemporaryDirectory(dir=folder) as out:
        call = [sys.executable, "-W", "ignore", "-c", RUN, str(folder), f"{out}/result", json.dumps(options)]
        process = subprocess.Popen(call, stdout=subprocess.PIPE, text=True)
        peak = np.zeros(2)
        while process.poll() is None:
            peak = np.maximum(peak, memory_of(process.pid))
            time.sleep(PAUSE)
        text = process.stdout.read()
        if process.returncode:
            sys.exit(process.returncode)
    return {**json.loads(text.splitlines()[-1]), "resident": peak[0], "anonymous": peak[1]}


def report(name, count, found):
    """Print one run."""
    rate, cost = count / found["total"] / 1e3, found["cpu"] / count * 1e6
    print(
        f"{name}: {count} points an epoch in {found['total']:.0f} s ({rate:.1f} k points/s; processors {cost:.1f} s a "
        f"million), {found['gauges']} gauges, peak {found['resident']:.0f} MB resident, "
        f"{found['anonymous']:.0f} MB anonymous"
    )
    print("   ", json.dumps(found["stages"]))
    return count / found["total"], count / found["cpu"]


def main():
    """Warm up, measure, print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--points", type=int, default=5_000_000, help="points of each epoch")
    parser.add_argument("--tile-points", type=int, default=None, help="points of a tile with its halo")
    parser.add_argument("--gauge", type=float, default=0.6, help="gauge length [m]")
    parser.add_argument("--spacing", type=float, default=0.15, help="gauge spacing [m]")
    parser.add_argument("--alone", action="store_true", help="leave the run of a million points out")
    given = parser.parse_args()
    options = {"gauge_length": given.gauge, "gauge_spacing": given.spacing, "structure": "tunnel"}
    tiled = {**options, "tiles": True, **({"tile_points": given.tile_points} if given.tile_points else {})}
    with tempfile.TemporaryDirectory() as name:
        print(MACHINE["machine"]())
        small = Path(name) / "small"
        write_pair(small, 150_000)
        run(small, tiled)
        large = Path(name) / "large"
        count = write_pair(large, given.points)
        many = report("tiles", count, run(large, tiled))
        if not given.alone:
            one = Path(name) / "one"
            count = write_pair(one, 1_000_000)
            single = report("one piece", count, run(one, {**options, "tiles": False}))
            print(f"throughput {many[0] / single[0]:.2f} by the clock, {many[1] / single[1]:.2f} by processor time")


if __name__ == "__main__":
    main()
