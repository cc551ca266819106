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


def other(reference, seen):
    """Point-to-plane alignment of all points by open3d on the same local origin: pose, seconds, of them for normals."""
    import open3d as o3d

    source, target = (o3d.geometry.PointCloud(o3d.utility.Vector3dVector(c)) for c in (seen, reference))
    _, normals, _ = timed(target.estimate_normals, o3d.geometry.KDTreeSearchParamKNN(30))
    registration = o3d.pipelines.registration
    criteria = registration.ICPConvergenceCriteria(relative_fitness=1e-9, relative_rmse=1e-9, max_iteration=100)
    plane = registration.TransformationEstimationPointToPlane()
    result, wall, cpu = timed(
        registration.registration_icp, source, target, 0.05, np.eye(4), plane, criteria
    )  # fmt: skip
    return np.array(result.transformation), wall, cpu, normals


def across(name, moved, truth):
    """Root mean square of the error along the normals of the true surface [mm]; sliding in itself is none."""
    if name.startswith("lining"):
        error = np.hypot(moved[:, 1], moved[:, 2]) - np.hypot(truth[:, 1], truth[:, 2])
    else:
        error = (moved - truth)[:, 1]
    return np.sqrt((error**2).mean()) * 1e3


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
        T, wall, cpu_other, normals = other(a, seen)
        print(
            f"{name}: cutting {cutting:.2f} s, fine fit {fitting:.3f} s = {2 * points / cpu / 1e6:.1f} M points/s/core,"
            f" whole stage {whole:.2f} s; rms error {np.sqrt((error**2).mean()) * 1e3:.3f} mm, residual "
            f"{result.rms * 1e3:.3f} mm, weak: {[w.description for w in result.weak_directions]}"
        )
        ours, theirs = (across(name, apply(pose, seen), b) for pose in (result.T_ref_cur, T))
        speed = f"{2 * points / cpu_other / 1e6:.2f} M points/s/core"
        print(
            f"    along the normals: {ours:.4f} mm; open3d's point-to-plane on all points: {theirs:.4f} mm, "
            f"{wall:.2f} s ({speed}) after {normals:.2f} s for normals; ratio of the fits {cpu_other / cpu:.0f}"
        )


if __name__ == "__main__":
    main()
