# SPDX-License-Identifier: MIT
"""How right and how honest the registration is, against exact truth over many seeds.

    python tests/benchmarks/bench_datum.py [--seeds 200] [--points 40000] [row ...]

Rows: still, moved, half, cylinder, clutter, density, scale. Walls have a relief of 10 mm, linings have a radius of
0.8 m; noise 1.5 to 2 mm, spacing 7 mm. Errors are those along the normal of the true surface, at places on the whole
of it.
"""

from __future__ import annotations

import argparse
import runpy
from pathlib import Path

import numpy as np

from scanstrain.epoch import make_epoch
from scanstrain.registration import register

HERE = Path(__file__).parent
SCENES = runpy.run_path(str(HERE.parent / "registration_scenes.py"))
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
SURVEY = np.array([431_250.0, 5_203_440.0, 212.0])
apply, motion, wall, lining = (SCENES[name] for name in ("apply", "motion", "wall", "lining"))
MAKERS = {"wall": (wall, {"relief": 0.01}), "lining": (lining, {})}


def normals_of(name, points):
    """Unit normals of the true surface at places on it."""
    if name == "lining":
        return SCENES["lining_normals"](points)
    x, z = points[:, 0], points[:, 2]
    # derivatives of the relief of registration_scenes.wall
    dx = 0.01 * (9 * np.cos(9 * x + 1) * np.cos(7 * z) + 3.1 * np.cos(3.1 * x + 4 * z))
    dz = 0.01 * (-7 * np.sin(9 * x + 1) * np.sin(7 * z) + 4 * np.cos(3.1 * x + 4 * z))
    n = np.c_[-dx, np.ones(len(x)), -dz]
    return n / np.linalg.norm(n, axis=1, keepdims=True)


def epochs(a, b, T=None):
    """Two epochs at survey coordinates, the second as seen in a frame that `T` takes to the first's."""
    seen = b if T is None else apply(np.linalg.inv(T), b)
    reference = make_epoch(a + SURVEY, origin=SURVEY)
    return reference, make_epoch(seen + SURVEY, origin=SURVEY)


def judged(name, result, T, places):
    """Errors [m] and claimed standard errors [m] along the normals at clean places of the true surface."""
    moved = apply(result.T_ref_cur, places if T is None else apply(np.linalg.inv(T), places))
    n = normals_of(name, places)
    # A slide or roll of a lining in itself is no error of its surface.
    aside = ((moved - places) * n).sum(axis=1)
    error = np.hypot(moved[:, 1], moved[:, 2]) - 0.8 if name == "lining" else aside
    sd = np.sqrt(np.einsum("ni,nij,nj->n", n, result.displacement_covariance(places), n))
    return error, sd


def clouds(name, seed, points, noise=0.002):
    make, options = MAKERS[name]
    rng = np.random.default_rng(seed)
    a, b = make(rng, points, noise=noise, **options), make(rng, points, noise=noise, **options)
    return (
        rng,
        a,
        b,
        make(rng, 300, noise=0.0, spacing=0.007 * np.sqrt(points / 300), **options)
        if (name == "wall")
        else on_lining(rng, points),
    )


def on_lining(rng, points):
    length, t = points * 0.007**2 / (0.8 * 1.5 * np.pi), np.pi / 2 + rng.uniform(-0.75, 0.75, 300) * np.pi
    return np.c_[rng.uniform(-length / 2, length / 2, 300), 0.8 * np.cos(t), 0.8 * np.sin(t)]


def rms_mm(errors):
    return f"{np.sqrt(np.mean(np.square(errors))) * 1e3:.4f}"


def coverage(errors, sds):
    z = np.concatenate(errors) / np.concatenate(sds)
    return f"{100 * np.mean(np.abs(z) < 1.96):.1f}", f"{np.mean(z**2):.2f}"


def still(seeds, points):
    """No change: near poses and poses to 10 degrees and 1 m."""
    for name in MAKERS:
        for reach in ((0.3, 0.02), (10.0, 1.0)):
            count = seeds if reach[0] < 1 else max(seeds // 4, 10)
            found = []
            for seed in range(count):
                rng, a, b, places = clouds(name, seed, points)
                T = motion(rng.uniform(-1, 1) * reach[0], rng.uniform(-1, 1) * reach[1])
                found.append(judged(name, register(*epochs(a, b, T)), T, places))
            errors, sds = zip(*found, strict=True)
            worst = max(np.abs(e).max() for e in errors) * 1e3
            yield (
                f"{name}, pose to {reach[0]} deg, {reach[1]} m",
                count,
                rms_mm(errors),
                f"{worst:.3f}",
                *coverage(errors, sds),
                "",
            )


def pushed(b, share, sigmas, sign=1.0):
    """The part with the lowest x moved along the normal by some standard deviations of a point."""
    part = b[:, 0] < np.quantile(b[:, 0], share)
    return b + np.where(part[:, None], [0.0, sign * sigmas * 0.002, 0.0], 0.0), part


def moved(seeds, points):
    for share in (0.3, 0.4):
        for sigmas in (5, 10, 20):
            found, ambiguous = [], 0
            for seed in range(max(seeds // 5, 10)):
                _, a, b, places = clouds("wall", seed, points)
                c, part = pushed(b, share, sigmas)
                result = register(*epochs(a, c))
                rest = places[:, 0] > b[part, 0].max()
                found.append(judged("wall", result, None, places[rest]))
                ambiguous += any("ambiguous" in said or "only" in said for said in result.warnings)
            errors, sds = zip(*found, strict=True)
            worst = max(np.sqrt(np.mean(e**2)) for e in errors) * 1e3
            yield (
                f"wall, {share:.0%} moved {sigmas} sd",
                len(found),
                rms_mm(np.concatenate(errors)),
                f"{worst:.3f}",
                *coverage(errors, sds),
                f"{ambiguous} warned",
            )


def half(seeds, points):
    for share in (0.5, 0.55, 0.6):
        found, warned = [], 0
        for seed in range(seeds):
            _, a, b, places = clouds("wall", seed, points)
            c, part = pushed(b, share, 10)
            edge = b[part, 0].max()
            warned += any("ambiguous" in said or "only" in said for said in register(*epochs(a, c)).warnings)
            if seed < max(seeds // 10, 5):
                reference, current = epochs(a, c)
                result = register(reference, current, stable=a[:, 0] > edge + 0.05)
                found.append(judged("wall", result, None, places[places[:, 0] > edge]))
        errors, sds = zip(*found, strict=True)
        worst = max(np.sqrt(np.mean(e**2)) for e in errors) * 1e3
        yield (
            f"wall, {share:.0%} moved, with control",
            len(found),
            rms_mm(np.concatenate(errors)),
            f"{worst:.3f}",
            *coverage(errors, sds),
            f"{warned} of {seeds} warned without",
        )


def cylinder(seeds, points):
    named = 0
    for seed in range(max(seeds // 4, 10)):
        _, a, b, _ = clouds("lining", seed, points)
        T = np.eye(4)
        roll = 0.005 / 0.8
        T[1:3, 1:3] = [[np.cos(roll), -np.sin(roll)], [np.sin(roll), np.cos(roll)]]
        T[0, 3] = 0.05
        words = {w.description for w in register(*epochs(a, b, T)).weak_directions}
        named += words == {"slide along the tunnel axis", "roll about the tunnel axis"}
    yield "lining, slide 50 mm, roll 5 mm", max(seeds // 4, 10), "", "", "", "", f"both named in {named}"


def clutter(seeds, points):
    for name in MAKERS:
        plain, dirty = [], []
        for seed in range(max(seeds // 5, 10)):
            rng, a, b, places = clouds(name, seed, points)
            plain.append(judged(name, register(*epochs(a, b)), None, places))
            hidden = []
            for cloud in (a, b):
                # 30 % hidden in three bands that differ between the epochs, and 5 % on two pipes before the surface
                span, start = np.ptp(cloud[:, 0]), rng.uniform(0, 1, 3)
                u = (cloud[:, 0] - cloud[:, 0].min()) / span
                out = np.zeros(len(cloud), bool)
                for s in start:
                    out |= (u - s) % 1.0 < 0.1
                kept = cloud[~out]
                n = normals_of(name, kept)
                across = np.arctan2(kept[:, 2], kept[:, 1]) if name == "lining" else kept[:, 2]
                v = (across - across.min()) / np.ptp(across)
                pipe = (np.abs(v - 0.3) < 0.0125) | (np.abs(v - 0.72) < 0.0125)
                kept = kept - np.where(pipe[:, None], 0.1 * n, 0.0)
                hidden.append(kept)
            dirty.append(judged(name, register(*epochs(*hidden)), None, places))
        errors, sds = zip(*dirty, strict=True)
        before = np.sqrt(np.mean(np.square([e for e, _ in plain])))
        ratio = np.sqrt(np.mean(np.square(errors))) / before
        yield (
            f"{name}, 30 % hidden, 5 % pipes",
            len(dirty),
            rms_mm(errors),
            f"{max(np.abs(e).max() for e in errors) * 1e3:.3f}",
            *coverage(errors, sds),
            f"rms x {ratio:.2f} (points x 0.67)",
        )


def density(seeds, points):
    """Four times as dense at one end as at the other in the reference, the other way round in the current epoch."""
    for name in MAKERS:
        found = []
        for seed in range(max(seeds // 5, 10)):
            rng, a, b, places = clouds(name, seed, 2 * points)
            thin = []
            for cloud, turn in ((a, 1), (b, -1)):
                u = (cloud[:, 0] - cloud[:, 0].min()) / np.ptp(cloud[:, 0])
                keep = 0.25 + 0.75 * (u if turn > 0 else 1 - u)
                thin.append(cloud[rng.random(len(cloud)) < keep])
            found.append(judged(name, register(*epochs(*thin)), None, places))
        errors, sds = zip(*found, strict=True)
        pattern = np.mean([np.mean(np.abs(e) > 1.96 * s) for e, s in found])
        yield (
            f"{name}, density 4:1 against 1:4",
            len(found),
            rms_mm(errors),
            f"{max(np.abs(e).max() for e in errors) * 1e3:.3f}",
            *coverage(errors, sds),
            f"{pattern:.1%} beyond the level",
        )


def scale(seeds, points):
    for ppm in (20, 500):
        values, errors = [], []
        for seed in range(max(seeds // 5, 10)):
            rng = np.random.default_rng(seed)
            a, b = SCENES["room"](rng, points, noise=0.002), SCENES["room"](rng, points, noise=0.002)
            result = register(*epochs(a, b * (1 + ppm * 1e-6)))
            values.append((result.scale_ppm, result.scale_ppm_sd))
            errors.append(np.linalg.det(result.T_ref_cur[:3, :3]) - 1.0)
        s, sd = np.array(values).T
        yield (
            f"room, hidden scale {ppm} ppm",
            len(s),
            "",
            "",
            f"{100 * np.mean(np.abs(s - ppm) < 1.96 * sd):.1f}",
            f"{np.mean(((s - ppm) / sd) ** 2):.2f}",
            f"{s.mean():.1f} +- {s.std():.1f} ppm, claimed {sd.mean():.1f}; det R - 1 < {np.abs(errors).max():.0e}",
        )


ROWS = {
    "still": still,
    "moved": moved,
    "half": half,
    "cylinder": cylinder,
    "clutter": clutter,
    "density": density,
    "scale": scale,
}


def main():
    """Run the rows that were asked for and print one table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("rows", nargs="*", choices=[[], *ROWS], help="all where none is named")
    parser.add_argument("--seeds", type=int, default=200)
    parser.add_argument("--points", type=int, default=40_000)
    given = parser.parse_args()
    print(MACHINE["machine"]() + "\n")
    head = ("scene", "seeds", "rms mm", "worst mm", "covered %", "mean z2", "")
    for name in given.rows or ROWS:
        MACHINE["table"](head, list(ROWS[name](given.seeds, given.points)))
        print()


if __name__ == "__main__":
    main()
