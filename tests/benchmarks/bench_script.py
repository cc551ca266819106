# SPDX-License-Identifier: MIT
"""Our fit against the script an engineer would write for it: a k-d tree and one least-squares solution a gauge.

    python tests/benchmarks/bench_script.py [--points 200000] [--gauge 0.3] [--spacing 0.075] [--gauges 150]

Both solve the same twelve unknowns with gain and offset of intensity from the same observation rows of the same
neighbourhoods, twice with Tukey's weights, and give a covariance. The script looks its members up in a
`scipy.spatial.cKDTree`, keeps those on the gauge's sheet, builds its rows with NumPy and solves with NumPy, gauge by
gauge in a Python loop. That loop is timed on some of the gauges. How near both answers are is printed beside the ratio.
"""

from __future__ import annotations

import argparse
import os
import runpy
import tempfile
import time
from pathlib import Path

# Small systems are solved faster by one thread, and on a busy machine waiting threads would count as the script's work.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy.spatial import cKDTree

import scanstrain
from scanstrain.neighbourhood import fit, level

HERE = Path(__file__).parent
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
SPEED = runpy.run_path(str(HERE / "bench_speed.py"), run_name="bench_speed")
FROM_POSITION = slice(fit.POSITION, fit.POSITION + 3)


def capture(folder, gauge, spacing):
    """Arguments of the last fit of a comparison, as they were before it."""
    kept = []
    plain = fit.fit_gauges

    def keep(*args):
        kept[:] = [np.copy(a) if isinstance(a, np.ndarray) else a for a in args]
        plain(*args)

    level.fit.fit_gauges = keep
    try:
        scanstrain.compare(
            folder / "a.laz", folder / "b.laz", gauge_length=gauge, gauge_spacing=spacing, assume_same_crs=True
        )
    finally:
        level.fit.fit_gauges = plain
    return kept


def script_fit(g, tree, args):
    """Fit one gauge as a script would; returns rows, unknowns and standard errors."""
    origin, frame, shape, radius, gate, weak = args[:6]
    hold, table, gains, held = args[8], args[14], args[15], args[16]
    o, f, k = origin[g], frame[g], shape[g]
    near = np.array(tree.query_ball_point(o, radius * 1.05))
    if not len(near):
        return 0, None, None
    x = (table[near, FROM_POSITION] - o) @ f
    height = x[:, 2] - 0.5 * k[0] * x[:, 0] ** 2 - k[1] * x[:, 0] * x[:, 1] - 0.5 * k[2] * x[:, 1] ** 2
    facing = np.abs(table[near, fit.NORMAL : fit.NORMAL + 3] @ f[:, 2])
    inside = (np.hypot(x[:, 0], x[:, 1]) <= radius) & (np.abs(height) < gate) & (facing > fit.SAME_SHEET)
    inside &= table[near, fit.VALID] > 0
    near, x = near[inside], x[inside] / radius
    row = table[near]
    moved = row[:, fit.MOVED : fit.MOVED + 3]
    slope, grey_slope = row[:, fit.SLOPE : fit.SLOPE + 3], gains[g] * row[:, fit.GREY_SLOPE : fit.GREY_SLOPE + 3]
    surface = np.hstack([design(slope @ f, x, True), np.zeros((len(near), 2))])
    grey = np.column_stack([
        design(grey_slope @ f, x, False), row[:, fit.GREY] - row[:, fit.GREY].mean(), np.ones(len(near)),
    ])  # fmt: skip
    right = [
        (slope * moved).sum(axis=1) - row[:, fit.MISFIT],
        row[:, fit.OWN_GREY] - gains[g] * row[:, fit.GREY] + (grey_slope * moved).sum(axis=1),
    ]
    now, scales = np.r_[held[g], 0.0, 0.0], [0.0, 0.0]
    draw = np.zeros(14)
    draw[[0, 1, 3, 4, 5, 6]] = 1 / hold**2
    for turn in range(fit.ROUNDS):
        weighted, sides = [], []
        for kind, A in enumerate((surface, grey)):
            e = (right[kind] - A @ now) / np.sqrt(row[:, fit.VARIANCE + 2 + kind])
            if turn == 0:
                scales[kind] = (1.4826 * np.median(np.abs(e))) ** 2
            q = np.maximum(1 - e**2 / (fit.TUKEY**2 * scales[kind]), 0.0) ** 2
            scales[kind] = (q * e**2).sum() / (q.sum() - (6, 8)[kind]) / fit.TUKEY_SHRINK
            root = np.sqrt(q / row[:, fit.VARIANCE + kind] / scales[kind])
            weighted.append(A * root[:, None])
            sides.append(right[kind] * root)
        A, b = np.vstack(weighted), np.concatenate(sides)
        pulled = A.T @ A + np.diag(draw + np.r_[np.full(12, weak**-2), 0.0, 0.0])
        now = np.linalg.solve(pulled, A.T @ b + draw * np.r_[held[g], 0.0, 0.0])
    data = np.vstack(weighted)
    covariance = np.linalg.inv(data.T @ data + np.diag(np.r_[np.full(12, weak**-2), 0.0, 0.0]))
    return len(near), now[:12], np.sqrt(np.diag(covariance)[:12] * fit.TUKEY_INFLATE)


def design(s, x, curved):
    """Columns of s.u(x) by the twelve unknowns."""
    s1, s2, s3 = s.T
    x1, x2, x3 = x.T
    bend = [0.5 * s3 * x1**2, s3 * x1 * x2, 0.5 * s3 * x2**2] if curved else [np.zeros(len(s))] * 3
    return np.column_stack([
        s1, s2, s3, s1 * x1, s1 * x2, s2 * x1, s2 * x2, s3 * x1 - s1 * x3, s3 * x2 - s2 * x3, *bend,
    ])  # fmt: skip


def main():
    """Compare once, fit again with both, print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--points", type=int, default=200_000, help="points of each epoch")
    parser.add_argument("--gauge", type=float, default=0.3, help="gauge length [m]: 0.3 m gives about 1000 rows")
    parser.add_argument("--spacing", type=float, default=0.075, help="gauge spacing [m]")
    parser.add_argument("--gauges", type=int, default=150, help="gauges that the script fits")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        SPEED["write_pair"](Path(name), given.points)
        args = capture(Path(name), given.gauge, given.spacing)
    print(MACHINE["machine"]())
    seconds, ours = [], []
    for _ in range(3):
        ours = [np.copy(a) if isinstance(a, np.ndarray) else a for a in args]
        begin, busy = time.perf_counter(), time.process_time()
        fit.fit_gauges(*ours)
        seconds.append((time.perf_counter() - begin, time.process_time() - busy))
    gauges = len(args[0])
    wall, cpu = (min(part) / gauges for part in zip(*seconds, strict=True))
    chosen = np.linspace(0, gauges - 1, min(given.gauges, gauges)).astype(int)
    begin, busy = time.perf_counter(), time.process_time()
    tree = cKDTree(args[14][:, FROM_POSITION])
    built, busy_built = time.perf_counter() - begin, time.process_time() - busy
    begin, busy = time.perf_counter(), time.process_time()
    answers = [script_fit(g, tree, args) for g in chosen]
    theirs = (time.perf_counter() - begin) / len(chosen) + built / gauges
    theirs_cpu = (time.process_time() - busy) / len(chosen) + busy_built / gauges
    kept, sd, info = ours[16], ours[19], ours[20]
    same = [n == info[g, fit.MATCHED] for g, (n, _, _) in zip(chosen, answers, strict=True)]
    away = [np.nanmax(np.abs(x - kept[g]) / np.maximum(sd[g], 1e-12))
            for g, (_, x, _) in zip(chosen, answers, strict=True) if x is not None]  # fmt: skip
    MACHINE["table"](
        ("per gauge", "milliseconds", "processor milliseconds"),
        [
            ("our fit", f"{1e3 * wall:.3f}", f"{1e3 * cpu:.3f}"),
            ("the script", f"{1e3 * theirs:.2f}", f"{1e3 * theirs_cpu:.2f}"),
        ],
    )
    print(f"{gauges} gauges of {np.nanmean(info[:, fit.MATCHED]):.0f} cells; ratio {theirs / wall:.0f}, ", end="")
    print(f"processor {theirs_cpu / cpu:.0f}; {1 / wall:.0f} gauges/s")
    print(f"same neighbourhoods in {np.mean(same):.1%}; answers within {np.median(away):.1e} standard errors (median)")


if __name__ == "__main__":
    main()
