# SPDX-License-Identifier: MIT
"""The demonstration: a service adit scanned three times and a yard wall scanned twice, at a place that is not."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from scanstrain.errors import OptionError
from scanstrain.registry import unknown_name
from scanstrain.synthetic.deformation import Cantilever, Deformation, Dome, Linear, Ovalisation, Still, Sum, Windowed
from scanstrain.synthetic.deformation import rotation as rotation_matrix
from scanstrain.synthetic.fields import RandomField
from scanstrain.synthetic.fixtures import Box, Fixture, Rod
from scanstrain.synthetic.scanner import Scan, Scanner, Setup, simulate_scan
from scanstrain.synthetic.scene import Scene
from scanstrain.synthetic.surfaces import FloatArray, Lining, Surface, Wall

ORIGIN = (482310.0, 5391270.0, 86.0)
"""Survey coordinates of the local origin [m], on a grid that exists nowhere."""

ADIT = Lining(1.9, 8.0, arc=(-np.pi / 6, 7 * np.pi / 6), start=(1.0, 2.0, 1.4), bearing=0.6)
WALL = Wall(8.0, 3.5, corner=(40.0, 10.0, 0.2), bearing=-0.35)

NAMES = ("adit_2031-03-04", "adit_2031-06-10", "adit_2031-09-12", "wall_2031-03-05", "wall_2031-09-13")


@dataclass(frozen=True, slots=True)
class SampleTruth:
    """Everything that is known of one demonstration scan.

    Parameters
    ----------
    name : str
        File name without suffix.
    scene : Scene
        The object; its deformation is the motion since the first epoch.
    pose : ndarray of shape (4, 4)
        Takes true local coordinates [m] to those of this file: its registration error. Identity for first epochs.
    setups, scanner, fixtures, spacing, seed
        As given to `simulate_scan`.
    """

    name: str
    scene: Scene
    pose: FloatArray
    setups: tuple[Setup, ...]
    scanner: Scanner
    fixtures: tuple[Fixture, ...]
    spacing: float
    seed: int

    @property
    def T_ref_cur(self) -> FloatArray:  # noqa: N802 - frames read right to left, as everywhere
        """The motion that registration has to find: local coordinates of this file to those of the first."""
        return np.asarray(np.linalg.inv(self.pose))

    def file_matrix(self) -> FloatArray:
        """Return the same motion in file coordinates."""
        T, origin = self.T_ref_cur.copy(), np.asarray(self.scene.origin)
        T[:3, 3] += origin - T[:3, :3] @ origin
        return T

    def scan(self) -> Scan:
        """Simulate the scan; the same points at every call."""
        return simulate_scan(
            self.scene,
            self.setups,
            deformed=True,
            seed=self.seed,
            scanner=self.scanner,
            fixtures=self.fixtures,
            spacing=self.spacing,
            pose=self.pose,
            label=self.name,
        )


def adit_motion(ovalisation: float, bulge: float) -> Deformation:
    """Return the motion of the adit: an oval (+ = wider) and a bulge of the right shoulder, [m]."""
    oval = Windowed(Ovalisation(ovalisation), (-np.inf, 0.8), (np.inf, 4.4), (1.0, 1.6))
    return Sum((oval, Dome(bulge, (float(np.deg2rad(50.0)) * ADIT.radius, 2.6), 1.5)))


def wall_motion(lean: float, bulge: float, stretch: float) -> Deformation:
    """Return the motion of the wall: a lean at the top [m], a bulge [m], a horizontal stretch [1]."""
    leaning = Windowed(Cantilever(lean, WALL.height), (0.2, -np.inf), (3.6, np.inf), (1.6, 1.0))
    drawn = Linear(((stretch, 0.0), (0.0, 0.0), (0.0, 0.0)), centre=(1.9, 0.0))
    return Sum((leaning, Dome(bulge, (1.9, 1.6), 1.4), Windowed(drawn, (0.2, 0.2), (3.6, 3.3), (1.1, 1.1))))


def sample_truth(name: str) -> SampleTruth:
    """Return what is known of the demonstration scan `name` (see `NAMES`).

    Raises
    ------
    OptionError
        An unknown name.
    """
    if name not in NAMES:
        raise OptionError(unknown_name("sample scan", name, list(NAMES)))
    index = NAMES.index(name)
    motion = _MOTIONS[name]
    surface: Surface = ADIT if name.startswith("adit") else WALL
    scene = Scene(
        surface,
        motion,
        relief=_skin(surface, rms=0.001, correlation_length=0.05, seed=index // 3 * 10 + 1),
        texture=_skin(surface, rms=0.30, correlation_length=0.04, seed=index // 3 * 10 + 2),
        origin=ORIGIN,
    )
    make = _adit_station if surface is ADIT else _wall_station
    setups, scanner, fixtures = make(np.random.default_rng(100 + index))
    turn, shift = _POSES[name]
    spacing = 0.018 if surface is ADIT else 0.014
    middle = np.array([[(surface.bounds[0] + surface.bounds[1]) / 2, (surface.bounds[2] + surface.bounds[3]) / 2]])
    pose = pose_about(surface.points(middle)[0], turn, shift)
    return SampleTruth(name, scene, pose, setups, scanner, fixtures, spacing, 2031 + index)


def first_epoch(name: str) -> SampleTruth:
    """Return the scan of the same object that `name` is compared with."""
    return sample_truth(next(other for other in NAMES if other[:4] == name[:4]))


def undeformed(sample: SampleTruth) -> SampleTruth:
    """Return the same scan of the object as if nothing had moved: for false-alarm tests."""
    return replace(sample, scene=replace(sample.scene, deformation=Still()))


def pose_about(
    pivot: FloatArray, rotation: tuple[float, float, float], shift: tuple[float, float, float]
) -> FloatArray:
    """Return the 4x4 motion that turns by a rotation vector [degrees] about `pivot` and then shifts [m]."""
    T = np.eye(4)
    T[:3, :3] = rotation_matrix(np.deg2rad(rotation))
    T[:3, 3] = pivot - T[:3, :3] @ pivot + np.asarray(shift)
    return T


_MOTIONS: dict[str, Deformation] = {
    "adit_2031-03-04": Still(),
    "adit_2031-06-10": adit_motion(0.002, 0.002),
    "adit_2031-09-12": adit_motion(0.005, 0.006),
    "wall_2031-03-05": Still(),
    "wall_2031-09-13": wall_motion(0.009, 0.005, 0.0015),
}

_POSES = {
    "adit_2031-03-04": ((0.0, 0.0, 0.0), (0.0, 0.0, 0.0)),
    "adit_2031-06-10": ((0.012, -0.009, 0.021), (0.0023, -0.0031, 0.0014)),
    "adit_2031-09-12": ((-0.016, 0.011, -0.034), (-0.0037, 0.0018, -0.0022)),
    "wall_2031-03-05": ((0.0, 0.0, 0.0), (0.0, 0.0, 0.0)),
    "wall_2031-09-13": ((0.014, 0.008, 0.027), (0.0028, 0.0035, -0.0017)),
}
"""Rotation vector [degrees] about the middle of the object, and shift [m]."""


def _skin(surface: Surface, *, rms: float, correlation_length: float, seed: int) -> RandomField:
    a0, a1, b0, b1 = surface.bounds
    return RandomField((a1 - a0, b1 - b0), rms=rms, correlation_length=correlation_length, seed=seed)


def _adit_place(right: float, forward: float, up: float) -> tuple[float, float, float]:
    """A place by its offset from the axis to the right, chainage, and height over the axis."""
    c, s = np.cos(ADIT.bearing), np.sin(ADIT.bearing)
    x, y, z = ADIT.start
    return (float(x + forward * c + right * s), float(y + forward * s - right * c), z + up)


def _wall_place(along: float, before: float, up: float) -> tuple[float, float, float]:
    """A place by its distance along the wall, before the wall, and height over its foot."""
    c, s = np.cos(WALL.bearing), np.sin(WALL.bearing)
    x, y, z = WALL.corner
    return (float(x + along * c + before * s), float(y + along * s - before * c), z + up)


def _adit_station(rng: np.random.Generator) -> tuple[tuple[Setup, ...], Scanner, tuple[Fixture, ...]]:
    """Two set-ups on the floor, near but not at the same places in every epoch; what stands in the adit."""
    floor = ADIT.radius * float(np.sin(ADIT.arc[0]))
    wide = 2 * ADIT.radius * float(np.cos(ADIT.arc[0]))
    places = np.array([[0.1, 2.6], [-0.1, 6.0]]) + rng.uniform(-0.15, 0.15, (2, 2))
    setups = tuple(
        Setup(_adit_place(r, f, floor + 1.5 + float(rng.uniform(-0.1, 0.1))), number)
        for number, (r, f) in enumerate(places, start=1)
    )
    bearing = ADIT.bearing
    fixtures = (
        Box(_adit_place(0, 4.0, floor - 0.15), (8.0, wide, 0.3), bearing, reflectance=0.7, classification=2),
        Box(_adit_place(0, 8.1, 0.0), (0.2, 4.2, 4.2), bearing, reflectance=0.9),
        Box(_adit_place(1.5, 6.3, floor + 0.5), (0.6, 0.3, 1.0), bearing, reflectance=1.1),
        Rod(_adit_place(-1.66, 0.2, 0.6), _adit_place(-1.66, 7.9, 0.6), 0.05),
    )
    return setups, Scanner(step=6e-3), fixtures


def _wall_station(rng: np.random.Generator) -> tuple[tuple[Setup, ...], Scanner, tuple[Fixture, ...]]:
    """Two set-ups in the yard, and what stands there: pavement, return wall, buttress, downpipe, post."""
    places = np.array([[2.0, 5.2], [5.6, 5.2]]) + rng.uniform(-0.2, 0.2, (2, 2))
    ahead = np.pi / 2 + WALL.bearing
    setups = tuple(
        Setup(
            _wall_place(along, before, 1.6 + float(rng.uniform(-0.1, 0.1))),
            number,
            azimuth=(ahead - 1.1, ahead + 1.1),
            elevation=(-1.0, 0.5),
        )
        for number, (along, before) in enumerate(places, start=1)
    )
    bearing = WALL.bearing
    fixtures = (
        Box(_wall_place(4.0, 2.1, -0.1), (8.0, 4.2, 0.2), bearing, reflectance=0.6, classification=2),
        Box(_wall_place(8.12, 0.8, 1.5), (0.24, 1.6, 3.0), bearing, reflectance=0.9),
        Box(_wall_place(6.6, 0.15, 1.75), (0.45, 0.3, 3.5), bearing, reflectance=1.0),
        Rod(_wall_place(4.9, 0.12, 0.0), _wall_place(4.9, 0.12, 3.5), 0.05, reflectance=0.5),
        Rod(_wall_place(2.9, 2.0, 0.0), _wall_place(2.9, 2.0, 2.4), 0.04),
    )
    return setups, Scanner(step=2.6e-3), fixtures
