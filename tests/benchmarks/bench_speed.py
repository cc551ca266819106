# SPDX-License-Identifier: MIT
"""Speed of the whole path, LAZ in and LAZ out, against laspy alone reading both files and writing the same result.

    python tests/benchmarks/bench_speed.py [--points 1000000] [--gauge 0.6] [--spacing 0.15] [--runs 2] [--times 10]

Every run is a process of its own; a first one on small clouds compiles and is not counted. The best run of each kind
is reported, with its peak memory. Imports are not counted on either side. Processor seconds count both cores: on a
busy machine they tell more. With `--times` the comparison is run again with so many times the points.
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
import json, resource, runpy, sys, time
folder, gauge, spacing, benchmarks = sys.argv[1], float(sys.argv[2]), float(sys.argv[3]), sys.argv[4]
import numpy as np
import scanstrain, scanstrain.outputs
from pathlib import Path
from scanstrain.neighbourhood import fit

def peak():
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024

phases = runpy.run_path(f"{benchmarks}/bench_phases.py")["Phases"]()
phases.wrap()
members, timed = [], fit.fit_gauges
def counted(*args):
    start = time.perf_counter()
    timed(*args)
    info = args[-3]
    members.append((time.perf_counter() - start, len(info), float(np.nansum(info[:, fit.MATCHED]))))
fit.fit_gauges = counted
begin, cpu = time.perf_counter(), time.process_time()
result = scanstrain.compare(f"{folder}/a.laz", f"{folder}/b.laz", gauge_length=gauge, gauge_spacing=spacing,
                            structure="tunnel", assume_same_crs=True)
compared, cpu_compared, peak_compared = time.perf_counter(), time.process_time(), peak()
scanstrain.write_result(result, Path(folder) / "out", report=False)
bare, cpu_bare = time.perf_counter(), time.process_time()
phases.wrap_outputs()
scanstrain.write_result(result, Path(folder) / "out")
done = time.perf_counter()
seconds, gauges, rows = (sum(part) for part in zip(*members))
print(json.dumps({
    **result.timing, "compare": compared - begin, "write, no report": bare - compared, "write": done - bare,
    "total, no report": bare - begin, "total": compared - begin + done - bare, "peak": peak(),
    "compared": peak_compared,
    "cpu, no report": cpu_bare - cpu, "cpu": cpu_compared - cpu + time.process_time() - cpu_bare,
    "phases": {name: [phases.wall[name], phases.cpu[name]] for name in phases.wall},
    "fits": gauges, "fit seconds": seconds, "rows": rows / gauges,
    "all_points": len(result.reference) + len(result.current),
    "clouds": sum(e.points.nbytes + (0 if e.intensity is None else e.intensity.nbytes)
                  for e in (result.reference, result.current)) / 2**20,
    "gauges": len(result.strain), "fine": int((result.strain.status == 0).sum()),
}))
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
    parser.add_argument("--times", type=int, default=1, help="compare again with so many times the points")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        small, large = Path(name) / "small", Path(name) / "large"
        for folder, points in ((small, 100_000), (large, given.points)):
            folder.mkdir()
            count = write_pair(folder, points)
        shape = (given.gauge, given.spacing, HERE)
        warm = run(OURS, small, *shape)
        print(MACHINE["machine"]())
        print(
            f"{count} points an epoch, gauge {given.gauge} m, spacing {given.spacing} m; warm-up {warm['total']:.1f} s"
        )
        ours = min((run(OURS, large, *shape) for _ in range(given.runs)), key=lambda r: r["total"])
        alone = min((run(LASPY, large) for _ in range(given.runs)), key=lambda r: r["total"])
        show(ours, alone)
        if given.times > 1:
            wide = Path(name) / "wide"
            wide.mkdir()
            write_pair(wide, given.times * given.points)
            more = run(OURS, wide, *shape)
            ratio = {key: more[key] / ours[key] for key in ("total", "total, no report", "cpu", "peak")}
            print(f"{given.times} times the points: " + ", ".join(f"{key} x {r:.2f}" for key, r in ratio.items()))


def show(ours, alone):
    """Print where the time of a run went, and the ratios to laspy alone."""
    stages = ("read", "set-ups", "structure", "registration", "neighbourhood", "strain", "sections", "points",
              "write, no report", "write")  # fmt: skip
    rows = [(stage, f"{ours[stage]:.2f}", f"{alone[stage]:.2f}" if stage in alone else "") for stage in stages]
    for key, theirs in (("total, no report", "total"), ("total", "total"), ("cpu, no report", "cpu"), ("cpu", "cpu")):
        rows.append((key, f"{ours[key]:.2f}", f"{alone[theirs]:.2f}"))
    rows.append(("peak memory MB", f"{ours['peak']:.0f}", f"{alone['peak']:.0f}"))
    MACHINE["table"](("stage", "seconds", "laspy alone"), rows)
    print()
    phases = [(name, f"{wall:.2f}", f"{cpu:.2f}") for name, (wall, cpu) in ours["phases"].items()]
    MACHINE["table"](("phase", "seconds", "processor seconds"), phases)
    print()
    above = (ours["compared"] - ours["clouds"]) * 2**20 / ours["all_points"]
    print(f"fit kernel: {ours['fits'] / ours['fit seconds']:.0f} gauges/s at {ours['rows']:.0f} cells each")
    print(f"peak of compare above the clouds: {above:.0f} bytes a point, interpreter and libraries included")
    each = ours["gauges"] / ours["neighbourhood"]
    print(f"{ours['gauges']} gauges, {ours['fine']} fine, {each:.0f} a second of the stage")
    print(f"ratio to laspy alone: {ours['total'] / alone['total']:.2f}, ", end="")
    print(f"without the report {ours['total, no report'] / alone['total']:.2f}; ", end="")
    print(f"processor seconds {ours['cpu'] / alone['cpu']:.2f}, {ours['cpu, no report'] / alone['cpu']:.2f}")


if __name__ == "__main__":
    main()
