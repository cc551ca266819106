# SPDX-License-Identifier: MIT
"""Single questions to the local fit: blur, motion that varies, gaps and clutter, joints, wet patches, power.

    python tests/benchmarks/bench_cases.py [blur moving harm joint grey power bins] [--seeds 2]

Drawn scenes with exact truth; `bins` runs the sample scans of the wall through the whole path.
"""

from __future__ import annotations

import argparse
import runpy
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
from scipy.special import jv

import scanstrain
from scanstrain.neighbourhood import fit_affine
from scanstrain.neighbourhood.joint_lines import Joint
from scanstrain.neighbourhood.joints import measure_joints
from scanstrain.strain import compute_strain
from scanstrain.strain.significance import wald
from scanstrain.synthetic import (
    Cantilever,
    Dome,
    Linear,
    Still,
    StrainBump,
    Sum,
    Wall,
    Windowed,
    first_epoch,
    sample_epoch,
    sample_truth,
)

HERE = Path(__file__).parent
MEASURES = runpy.run_path(str(HERE.parent / "scenes" / "scene_measures.py"))
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
GAUGE, SPACING, NOISE, GREY_NOISE = 0.6, 0.01, 5e-4, 30.0
HOMOGENEOUS = Linear(((6e-4, 2e-4), (-3e-4, -4e-4), (1e-3, -8e-4)), centre=(1.5, 1.5), offset=(3e-4, -2e-4, 2e-3))
NORMAL = ("un", "gn1", "gn2")
BINS = 4


def drawn(scene, seed, *, change=lambda epoch, deformed: epoch, joints=(), gauge=GAUGE, **options):
    """Two epochs of a scene and their field."""
    pair = [
        change(
            sample_epoch(
                scene, deformed=deformed, spacing=SPACING, noise=NOISE, intensity_noise=GREY_NOISE,
                seed=100 + 2 * seed + deformed, **options,
            ),
            deformed,
        )
        for deformed in (False, True)
    ]  # fmt: skip
    return pair, fit_affine(*pair, gauge_length=gauge, gauge_spacing=gauge / 4, joints=joints)


def blur(seeds):
    """Loss at the peak of a strain bump, and what is said about it."""
    peak, rows = 1e-2, []
    for width in (2 * GAUGE, 4 * GAUGE):
        true, said = [], []
        for seed in range(seeds):
            scene = MEASURES["textured"](Wall(4.0, 2.0), StrainBump(peak, 2.0, width), seed=seed)
            _, field = drawn(scene, seed)
            errors = MEASURES["errors_of"](scene, field)
            top = errors.inside & (np.abs(errors.material[:, 0] - 2.0) < 0.08) & np.isfinite(errors.error[:, 3])
            true.append(errors.error[top, 3])
            said.append(field.bias[top, 3])
        true, said = np.concatenate(true), np.concatenate(said)
        k = np.linspace(1e-6, 8, 20001) * 2 * np.sqrt(2 * np.log(2)) / width
        theory = 1 - np.average(
            8 * jv(2, k * GAUGE / 2) / (k * GAUGE / 2) ** 2, weights=np.exp(-((k * width) ** 2) / (16 * np.log(2)))
        )
        rows.append(
            (
                f"{width / GAUGE:.0f} L", len(true), f"{100 * theory:.2f}", f"{-100 * true.mean() / peak:.2f}",
                f"{100 * true.std() / np.sqrt(len(true)) / peak:.2f}", f"{-100 * np.nanmean(said) / peak:.2f}",
                int(np.isnan(said).sum()),
            )
        )  # fmt: skip
    MACHINE["table"](("bump", "gauges", "theory %", "loss %", "+-", "reported %", "unknown"), rows)


def moving(seeds):
    """Coverage where the motion varies, with and without the bias in the interval."""
    rows = []
    part = Sum((Cantilever(0.009, 3.0), Dome(0.006, (4.0, 1.5), 0.8)))
    for name, motion in (("dome of 0.8 m", part), ("nothing", Still())):
        runs = []
        for seed in range(seeds):
            scene = MEASURES["textured"](Wall(6.0, 3.0), motion, seed=seed)
            _, field = drawn(scene, seed, gauge=0.4)
            runs.append((MEASURES["errors_of"](scene, field), field.bias))
        for k, unknown in ((2, "un"), (7, "gn1"), (8, "gn2")):
            for where in ("on the dome", "elsewhere"):
                error, sd, bias = [], [], []
                for errors, said in runs:
                    near = np.hypot(errors.material[:, 0] - 4.0, errors.material[:, 1] - 1.5) < 1.0
                    use = errors.inside & (near if where == "on the dome" else ~near)
                    error.append(errors.error[use, k])
                    sd.append(errors.sd[use, k])
                    bias.append(np.nan_to_num(said[use, k]))
                error, sd, bias = map(np.concatenate, (error, sd, bias))
                wide = np.hypot(sd, bias)
                rows.append(
                    (
                        name, unknown, where, len(error), f"{1e6 * MEASURES['rms'](error):.0f}",
                        f"{1e6 * np.median(sd):.0f}", f"{100 * MEASURES['coverage'](error, sd):.1f}",
                        f"{100 * MEASURES['coverage'](error, wide):.1f}", f"{np.mean((error / sd) ** 2):.2f}",
                        f"{np.mean((error / wide) ** 2):.2f}",
                    )
                )  # fmt: skip
    head = ("motion", "unknown", "place", "n", "RMSE 1e-6", "sd", "cover %", "with bias", "MNSE", "with bias")
    MACHINE["table"](head, rows)


def thinned(epoch, _deformed):
    """Take three of four points from the left half."""
    keep = (epoch.points[:, 0] > np.median(epoch.points[:, 0])) | (np.arange(len(epoch)) % 4 == 0)
    return replace(epoch, points=epoch.points[keep], intensity=epoch.intensity[keep])


def harm(seeds):
    """Root mean square errors beside those of clean scans."""
    rng = np.random.default_rng(3)
    holes = tuple((*rng.uniform(0, 3, 2), 0.12) for _ in range(70))
    cases = {
        "clean": {}, "30 % occluded": {"holes": holes}, "5 % outliers": {"outliers": 0.05},
        "density 4:1": {"change": thinned},
    }  # fmt: skip
    rows, clean = [], {}
    for name, options in cases.items():
        found = []
        for seed in range(seeds):
            scene = MEASURES["textured"](Wall(3.0, 3.0), HOMOGENEOUS, seed=seed)
            pair, field = drawn(scene, seed, **options)
            found.append((MEASURES["errors_of"](scene, field), len(pair[0]) / (3.0 / SPACING) ** 2))
        for unknown in (*NORMAL, "u1", "g11"):
            error, sd = (np.concatenate(part) for part in zip(*[run[0].of(unknown) for run in found], strict=True))
            size = MEASURES["rms"](error)
            clean.setdefault(unknown, size)
            rows.append(
                (
                    name, f"{100 * found[0][1]:.0f}", unknown, len(error), f"{1e6 * size:.0f}",
                    f"{size / clean[unknown]:.2f}", f"{100 * MEASURES['coverage'](error, sd):.1f}",
                )
            )  # fmt: skip
    MACHINE["table"](("scans", "points %", "unknown", "n", "RMSE 1e-6", "over clean", "cover %"), rows)


def joint(seeds):
    """A joint that opened by 1 mm and stepped by 1 mm, and the strain beside it over its noise."""
    rows = []
    right = Windowed(Linear(offset=(1e-3, 0.0, 1e-3)), (2.0, -9.0), (99.0, 9.0), (1e-6, 1e-6))
    for seed in range(seeds):
        scene = MEASURES["textured"](Wall(4.0, 2.0), right, seed=seed)
        ends = scene.surface.points(np.array([[2.0, 0.0], [2.0, 2.0]]))
        line = Joint("joint", ends, 0.02)
        pair, field = drawn(scene, seed, joints=(line,))
        (found,) = measure_joints(*pair, field, (line,))
        strain = compute_strain(field)
        beside = np.abs(field.position[:, 0] - ends[0, 0]) < GAUGE / 2
        larger, sd = (np.asarray(strain.values[name])[beside] for name in ("strain_1", "strain_1_sd"))
        away = found.values - np.array([1e-3, 0.0, 1e-3, 0.0])
        rows.append(
            (
                seed, len(away), *[f"{1e3 * MEASURES['rms'](away[np.isfinite(away[:, k]), k]):.2f}" for k in range(3)],
                *[f"{1e3 * found.mean[k]:.2f}" for k in range(3)], f"{np.nanmedian(np.abs(larger) / sd):.2f}",
            )
        )  # fmt: skip
    head = (
        "pair", "places", "RMSE opening mm", "slip", "step", "whole: opening mm", "slip", "step", "|strain_1| / sd"
    )  # fmt: skip
    MACHINE["table"](head, rows)


def wetted(epoch, deformed, *, gain=1.0):
    """Another gain in the current epoch, and a patch of it that returns 40 % less."""
    if not deformed:
        return epoch
    wet = np.hypot(epoch.points[:, 0] - epoch.points[:, 0].mean(), epoch.points[:, 2] - epoch.points[:, 2].mean()) < 0.5
    return replace(epoch, intensity=(epoch.intensity * np.where(wet, 0.6 * gain, gain)).astype(np.float32))


def grey(seeds):
    """False strain where only the intensity changed."""
    rows = []
    cases = {
        "as it was": {}, "gain 1.3": {"change": lambda e, d: replace(e, intensity=e.intensity * (1.3 if d else 1.0))},
        "wet patch": {"change": wetted},
    }  # fmt: skip
    for name, options in cases.items():
        p, found, gauges, seen = [], 0, 0, 0
        for seed in range(seeds):
            scene = MEASURES["textured"](Wall(3.0, 3.0), Still(), seed=seed)
            _, field = drawn(scene, seed, **options)
            fine = field.status == 0
            result = compute_strain(field)
            rows_of = fine & field.observable[:, 3:7].all(axis=1)
            g, C = field.gradient[rows_of][:, :2].reshape(-1, 4), field.covariance[rows_of][:, 3:7, 3:7]
            J = np.array([[1, 0, 0, 0], [0, 0, 0, 1], [0, 0.5, 0.5, 0]])
            p.append(wald(g @ J.T, J @ C @ J.T, np.ones((len(g), 3), bool)))
            found += int(result.values["discovery"].sum())
            gauges, seen = gauges + int(fine.sum()), seen + len(g)
        p = np.concatenate(p)
        rows.append((name, gauges, seen, f"{100 * np.mean(p < 0.05):.1f}", f"{100 * np.mean(p < 0.01):.1f}", found))
    MACHINE["table"](("intensity", "gauges", "with strain", "p<0.05 %", "p<0.01 %", "discoveries"), rows)


def power(seeds):
    """Share found of a normal displacement of 1.5 times the stated minimum, and of false ones among the discoveries."""
    rows = []
    for seed in range(seeds):
        still = MEASURES["textured"](Wall(6.0, 3.0), Still(), seed=seed)
        stated = float(np.nanmedian(compute_strain(drawn(still, seed, gauge=0.4)[1]).detectable_80["disp_n"]))
        size = 1.5 * stated
        step = Windowed(Linear(offset=(0.0, 0.0, size)), (3.0, -9.0), (99.0, 9.0), (1e-6, 1e-6))
        scene = MEASURES["textured"](Wall(6.0, 3.0), step, seed=seed)
        _, field = drawn(scene, seed + 50, gauge=0.4)
        result = compute_strain(field)
        x = MEASURES["errors_of"](scene, field).material[:, 0]
        fine = field.status == 0
        moved, rest = fine & (x > 3.2), fine & (x < 2.8)
        found = result.values["discovery"] == 1
        alone = np.abs(result.values["disp_n"]) > result.detection_limit["disp_n"]
        false = (found & rest).sum() / max((found & (moved | rest)).sum(), 1)
        rows.append(
            (
                seed, f"{1e6 * stated:.0f}", int(moved.sum()), f"{100 * alone[moved].mean():.1f}",
                f"{100 * found[moved].mean():.1f}", int(rest.sum()), f"{100 * false:.1f}",
            )
        )  # fmt: skip
    head = ("pair", "minimum 1e-6 m", "moved", "test finds %", "discovered %", "still", "false %")
    MACHINE["table"](head, rows)


def bins(_seeds):
    """Coverage on the sample scans of the wall, by range and by incidence."""
    sample = sample_truth("wall_2031-09-13")
    reference, current = first_epoch("wall_2031-09-13").scan().epoch, sample.scan().epoch
    config = scanstrain.CompareConfig(
        neighbourhood={"gauge_length": 0.6, "gauge_spacing": 0.15}, strain={"structure": "wall"}
    )
    result = scanstrain.compare_epochs(reference, current, config)
    shift = result.reference.origin - sample.scene.origin
    errors = MEASURES["errors_of"](sample.scene, result.field, shift=shift, registration=result.registration)
    setups = np.array([setup.position for setup in sample.setups])
    beam = (result.field.position + shift)[:, None] - setups
    distance = np.linalg.norm(beam, axis=2)
    nearest = distance.argmin(axis=1)
    rows_of = np.arange(len(nearest))
    away = distance[rows_of, nearest]
    cosine = np.abs(np.einsum("gi,gi->g", beam[rows_of, nearest], result.field.frame[:, :, 2])) / away
    rows = []
    for title, values in (("range [m]", away), ("incidence [deg]", np.degrees(np.arccos(np.clip(cosine, 0, 1))))):
        edges = np.quantile(values[errors.inside], np.linspace(0, 1, BINS + 1))
        for low, high in pairwise(edges):
            here = errors.inside & (values >= low) & (values <= high)
            for unknown in (*NORMAL, "g11"):
                error, sd = errors.of(unknown, here)
                if len(error) > 20:
                    cover = f"{100 * MEASURES['coverage'](error, sd):.1f}"
                    mean_square = f"{np.mean((error / sd) ** 2):.2f}"
                    rows.append((title, f"{low:.1f} - {high:.1f}", unknown, len(error), cover, mean_square))
    MACHINE["table"](("by", "bin", "unknown", "n", "cover %", "MNSE"), rows)


CASES = {"blur": blur, "moving": moving, "harm": harm, "joint": joint, "grey": grey, "power": power, "bins": bins}


def main():
    """Run the cases that are named, or all of them."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("cases", nargs="*", help=f"of {', '.join(CASES)}; all by default")
    parser.add_argument("--seeds", type=int, default=2, help="pairs drawn of every scene")
    given = parser.parse_args()
    print(MACHINE["machine"]())
    for name in given.cases or CASES:
        print(f"\n{name}: {CASES[name].__doc__}")
        CASES[name](given.seeds)


if __name__ == "__main__":
    main()
