# SPDX-License-Identifier: MIT
"""Speed and accuracy of the registration; run by hand: `python tests/benchmarks/bench_registration.py [points]`."""

import os
import runpy
import sys
import time
from pathlib import Path

import numpy as np

from scanstrain.registration import fit, levels, register
from scanstrain.registration.coarse import to_grid

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
apply, epoch, motion = (SCENES[name] for name in ("apply", "epoch", "motion"))


def timed(call, *arguments, **options):
    began = time.perf_counter(), time.process_time()
    value = call(*arguments, **options)
    return value, time.perf_counter() - began[0], time.process_time() - began[1]


def fine_fit(mine, theirs):
    """All levels from the identity on, blocks given; the wide levels drop out on small objects."""
    T = to_grid(np.eye(4), theirs[-1])
    for a, b in zip(mine, theirs, strict=True):
        result = fit.align(a, b, T, metric=fit.level_metric(a), **fit.rough(a, 60))
        T = result.T_ref_grid
    return result


def clouds(make, points, **options):
    rng = np.random.default_rng(1)
    a, b = make(rng, points, **options), make(rng, points, **options)
    return a, b, apply(np.linalg.inv(motion(0.3, 0.03)), b)


def main():
    points = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000
    print(f"cores: {os.cpu_count()}; load {os.getloadavg()[0]:.1f}; {points} + {points} points")
    scenes = {
        "wall with relief": (SCENES["wall"], {"relief": 0.01}),
        "lining, R 3 m": (SCENES["lining"], {"radius": 3.0}),
    }
    for name, (make, options) in scenes.items():
        a, _, seen = clouds(make, 50_000, **options)
        register(epoch(a), epoch(seen))  # compiles
        a, b, seen = clouds(make, points, **options)
        (mine, theirs), cutting, _ = timed(levels.cut_both, a, seen, 0.3)
        _, fitting, cpu = timed(fine_fit, mine, theirs)
        result, whole, _ = timed(register, epoch(a), epoch(seen))
        error = np.linalg.norm(apply(result.T_ref_cur, seen) - b, axis=1)
        print(
            f"{name}: cutting {cutting:.2f} s, fine fit {fitting:.3f} s = {2 * points / cpu / 1e6:.1f} M points/s/core,"
            f" whole stage {whole:.2f} s; rms error {np.sqrt((error**2).mean()) * 1e3:.3f} mm, residual "
            f"{result.rms * 1e3:.3f} mm, weak: {[w.description for w in result.weak_directions]}"
        )


if __name__ == "__main__":
    main()
