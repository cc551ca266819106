# SPDX-License-Identifier: MIT
"""Speed of the whole path, LAZ in and LAZ out, against laspy alone reading both files and writing the same result.

    python tests/benchmarks/bench_speed.py [--points 1000000] [--gauge 0.6] [--spacing 0.15] [--runs 2]

Every run is a process of its own; a first one on small clouds compiles and is not counted. The best run of each kind
is reported, with its peak memory. Processor seconds count both cores: on a busy machine they tell more.
"""

from __future__ import annotations

import argparse
import json
import runpy
import subprocess
import sys
import tempfile
from pathlib import Path

import laspy
import numpy as np

from scanstrain.synthetic import Dome, Lining, RandomField, Scene, Sum, Windowed, sample_epoch
from scanstrain.synthetic.deformation import Ovalisation

HERE = Path(__file__).parent
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
ORIGIN = (482310.0, 5391270.0, 86.0)

OURS = """
import json, resource, sys, time
folder, gauge, spacing = sys.argv[1], float(sys.argv[2]), float(sys.argv[3])
import scanstrain
from pathlib import Path
begin, cpu = time.perf_counter(), time.process_time()
result = scanstrain.compare(f"{folder}/a.laz", f"{folder}/b.laz", gauge_length=gauge, gauge_spacing=spacing,
                            structure="tunnel", assume_same_crs=True)
compared = time.perf_counter()
scanstrain.write_result(result, Path(folder) / "out")
done = time.perf_counter()
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
print(json.dumps({**result.timing, "compare": compared - begin, "write": done - compared, "total": done - begin,
                  "peak": peak, "cpu": time.process_time() - cpu,
                  "gauges": len(result.strain), "fine": int((result.strain.status == 0).sum())}))
"""

LASPY = """
import json, resource, sys, time
import laspy
folder = sys.argv[1]
result = laspy.read(f"{folder}/out/strain.laz")
begin, cpu = time.perf_counter(), time.process_time()
for name in ("a", "b"):
    cloud = laspy.read(f"{folder}/{name}.laz")
    cloud.xyz, cloud.intensity
read = time.perf_counter()
result.write(f"{folder}/copy.laz")
done = time.perf_counter()
print(json.dumps({"read": read - begin, "write": done - read, "total": done - begin, "cpu": time.process_time() - cpu,
                  "peak": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024}))
"""


def write_pair(folder, points):
    """Two epochs of a lining of about `points` points each, as a scanner's software exports them."""
    spacing = 0.008
    radius = 2.0
    lining = Lining(radius, points * spacing**2 / (2 * np.pi * radius))
    extent = (2 * np.pi * radius, lining.length)
    scene = Scene(
        lining,
        Sum((
            Windowed(Ovalisation(0.004), (-np.inf, 0.2 * lining.length), (np.inf, 0.7 * lining.length), (1.0, 0.7)),
            Dome(0.005, (2.0, lining.length / 2), 1.0),
        )),
        relief=RandomField(extent, rms=1e-3, correlation_length=0.05, seed=1),
        texture=RandomField(extent, rms=0.18, correlation_length=0.04, seed=2),
    )  # fmt: skip
    for name, deformed in (("a", False), ("b", True)):
        epoch = sample_epoch(scene, deformed=deformed, spacing=spacing, intensity_noise=30.0, seed=10 + deformed)
        header = laspy.LasHeader(version="1.4", point_format=6)
        header.scales, header.offsets = np.full(3, 1e-4), np.array(ORIGIN)
        las = laspy.LasData(header)
        las.xyz = epoch.points + np.array(ORIGIN)
        las.intensity = np.clip(np.round(epoch.intensity), 0, 65535).astype(np.uint16)
        las.return_number = las.number_of_returns = np.ones(len(epoch), np.uint8)
        las.write(folder / f"{name}.laz")
    return len(epoch)


def run(script, *arguments):
    """Run a script in a process of its own and take its numbers."""
    call = [sys.executable, "-W", "ignore", "-c", script, *map(str, arguments)]
    done = subprocess.run(call, capture_output=True, text=True, check=False)
    if done.returncode:
        sys.exit(done.stderr)
    return json.loads(done.stdout.splitlines()[-1])


def main():
    """Warm up, measure, print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--points", type=int, default=1_000_000, help="points of each epoch")
    parser.add_argument("--gauge", type=float, default=0.6, help="gauge length [m]")
    parser.add_argument("--spacing", type=float, default=0.15, help="gauge spacing [m]")
    parser.add_argument("--runs", type=int, default=2, help="runs of each kind, of which the best counts")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        small, large = Path(name) / "small", Path(name) / "large"
        for folder, points in ((small, 100_000), (large, given.points)):
            folder.mkdir()
            count = write_pair(folder, points)
        warm = run(OURS, small, given.gauge, given.spacing)
        print(MACHINE["machine"]())
        print(
            f"{count} points an epoch, gauge {given.gauge} m, spacing {given.spacing} m; warm-up {warm['total']:.1f} s"
        )
        ours = min((run(OURS, large, given.gauge, given.spacing) for _ in range(given.runs)), key=lambda r: r["total"])
        alone = min((run(LASPY, large) for _ in range(given.runs)), key=lambda r: r["total"])
    stages = ("read", "registration", "neighbourhood", "strain", "points", "write")
    rows = [(stage, f"{ours[stage]:.2f}", f"{alone[stage]:.2f}" if stage in alone else "") for stage in stages]
    rows.append(("total", f"{ours['total']:.2f}", f"{alone['total']:.2f}"))
    rows.append(("processor seconds", f"{ours['cpu']:.2f}", f"{alone['cpu']:.2f}"))
    rows.append(("peak memory MB", f"{ours['peak']:.0f}", f"{alone['peak']:.0f}"))
    MACHINE["table"](("stage", "seconds", "laspy alone"), rows)
    print(f"ratio {ours['total'] / alone['total']:.2f}; {ours['gauges']} gauges, {ours['fine']} fine, ", end="")
    print(f"{ours['gauges'] / ours['neighbourhood']:.0f} gauges/s")


if __name__ == "__main__":
    main()
