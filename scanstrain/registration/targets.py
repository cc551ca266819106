# SPDX-License-Identifier: MIT
"""Rigid motion from pairs of named targets, with its covariance, and the targets that contradict the others."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.errors import RegistrationError, explain
from scanstrain.linalg import cross_matrix
from scanstrain.registration.adjustment import Adjustment, adjust, critical_value
from scanstrain.registration.rigid import rigid, rigid_fit, rotation
from scanstrain.registration.target_pairs import CONTRADICTION, Pairs, check_pairs, fixed

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

WEAK_TURN = 5.0
"""Error from turning, as far off as the targets are apart, over the standard deviation of one target: beyond this
their arrangement is worth a warning."""
GLOBAL_ALPHA = 0.01
"""Probability of a false word on the standard deviations as a whole, half of it on either side."""
STEPS, SETTLED = 30, 1e-14
"""Gauss-Newton steps at most, and the step, in radians and parts of the extent, that ends them."""


@dataclass(frozen=True, slots=True)
class TargetFit:
    """Rigid motion that takes current targets to reference targets.

    Parameters
    ----------
    names : tuple of str
    T_ref_cur : ndarray of shape (4, 4)
        In the coordinates that were given [m].
    pivot : ndarray of shape (3,)
        Centre of the used targets, reference coordinates [m].
    covariance : ndarray of shape (6, 6)
        Of (rotation vector [rad], translation at the pivot [m]), from the standard deviations as given.
    residuals : ndarray of shape (n, 3)
        Reference minus moved current coordinates, of the targets left out as well [m].
    redundancy : ndarray of shape (n, 3)
        Part of an error that shows in its own residual [1].
    w : ndarray of shape (n, 3)
        Normalised residual; of a target left out: when it was left out [1].
    detectable : ndarray of shape (n, 3)
        Smallest error that the test finds in four cases of five [m].
    used : ndarray of shape (n,), bool
    blunders : tuple of str
        Names left out, the worst first.
    critical : float
        Limit of |w| [1].
    variance_factor, p_value : float
        A-posteriori over a-priori variance, and the two-sided probability of a value as odd [1].
    redundant : int
        Observations more than needed.
    """

    names: tuple[str, ...]
    T_ref_cur: FloatArray
    pivot: FloatArray
    covariance: FloatArray
    residuals: FloatArray
    redundancy: FloatArray
    w: FloatArray
    detectable: FloatArray
    used: BoolArray
    blunders: tuple[str, ...]
    critical: float
    variance_factor: float
    p_value: float
    redundant: int
    warnings: tuple[str, ...] = ()

    @property
    def rms(self) -> float:
        """Root mean square of the residual coordinates of the used targets [m]."""
        return float(np.sqrt((self.residuals[self.used] ** 2).mean()))


def fit_targets(
    names: Sequence[str],
    reference: ArrayLike,
    current: ArrayLike,
    *,
    reference_sd: ArrayLike,
    current_sd: ArrayLike,
    alpha: float = 0.001,
) -> TargetFit:
    """Fit the rigid motion that takes current targets to reference targets, and leave out blunders.

    Minimises sum d_i' C_i^-1 d_i with d_i = p_i - R q_i - t and C_i the sum of both covariances in reference axes: in
    closed form for a start, then by Gauss-Newton. The target with the largest |w| beyond the critical value is named a
    blunder and left out, one at a time (data snooping, Baarda 1968), while the others still fix the motion. There is
    no scale: it would absorb a uniform strain.

    Parameters
    ----------
    names : sequence of str, length n
    reference, current : array_like of shape (n, 3)
        Coordinates of the same targets in both epochs [m].
    reference_sd, current_sd : float or array_like of shape (n,) or (n, 3)
        Standard deviations of the coordinates, along the axes of their own epoch [m].
    alpha : float
        Probability of calling a good coordinate a blunder [1].

    Returns
    -------
    TargetFit

    Raises
    ------
    OptionError
        Shapes, values or names that are wrong.
    RegistrationError
        Fewer than three targets, all on one line, mirrored, in different units, or contradicting one another.
    """
    pairs = check_pairs(names, reference, current, reference_sd, current_sd)
    used = np.ones(len(pairs.names), bool)
    limit = critical_value(alpha)
    tests = np.full((3, len(used), 3), np.nan)
    blunders: list[int] = []
    while True:
        T, pivot, solved = _solve(pairs, used, alpha)
        tests[:, used] = np.stack([solved.redundancy, solved.w, solved.detectable]).reshape(3, -1, 3)
        largest = np.where(used, np.nan_to_num(np.abs(tests[1])).max(axis=1), 0.0)
        worst = int(largest.argmax())
        rest = used & (np.arange(len(used)) != worst)
        if largest[worst] <= limit or not fixed(pairs, rest):
            break
        blunders.append(worst)
        used = rest
    doubt = pairs.names[worst] if largest[worst] > limit else None
    return _judged(pairs, used, T, pivot, solved, tests, blunders, limit, doubt)


def _solve(pairs: Pairs, used: BoolArray, alpha: float) -> tuple[FloatArray, FloatArray, Adjustment]:
    """Motion by Gauss-Newton, its pivot and the adjustment of the last step."""
    p, q = pairs.reference[used], pairs.current[used]
    weight = 1 / pairs.noise()[used] ** 2
    pivot, middle = np.average(p, axis=0, weights=weight), np.average(q, axis=0, weights=weight)
    p, q = p - pivot, q - middle
    extent = float(np.linalg.norm(p, axis=1).max())
    T = rigid_fit(q, p, weight)[0]
    n = len(p)
    for _ in range(STEPS):
        R = T[:3, :3]
        moved = q @ R.T + T[:3, 3]
        blocks = np.einsum("ij,nj,kj->nik", R, pairs.current_variance[used], R)
        blocks[:, range(3), range(3)] += pairs.reference_variance[used]
        covariance = np.zeros((n, 3, n, 3))
        covariance[range(n), :, range(n)] = blocks
        design = np.concatenate([-cross_matrix(moved), np.broadcast_to(np.eye(3), (n, 3, 3))], axis=2)
        solved = adjust(design.reshape(-1, 6), (p - moved).ravel(), covariance.reshape(3 * n, 3 * n), alpha=alpha)
        turn, shift = solved.estimate[:3], solved.estimate[3:]
        T = rigid(rotation(turn), shift) @ T
        if np.linalg.norm(turn) + np.linalg.norm(shift) / extent < SETTLED:
            break
    R = T[:3, :3]
    return rigid(R, T[:3, 3] + pivot - R @ middle), pivot, solved


def _judged(
    pairs: Pairs,
    used: BoolArray,
    T: FloatArray,
    pivot: FloatArray,
    solved: Adjustment,
    tests: FloatArray,
    blunders: list[int],
    limit: float,
    doubt: str | None,
) -> TargetFit:
    """Put the result together, with what is to be said of it."""
    redundant = 3 * int(used.sum()) - 6
    factor, p_value = _global_test(solved.total, redundant)
    named = tuple(pairs.names[i] for i in blunders)
    too_many = 2 * len(blunders) >= len(pairs.names)
    if too_many or (doubt is not None and factor > CONTRADICTION**2):
        got = (
            f"{len(blunders)} of {len(pairs.names)} left out ({', '.join(named) or 'none'}) and residuals of "
            f"{np.sqrt(factor):.3g} times their standard deviations among the others"
        )
        raise RegistrationError(explain("targets", "targets that agree", got, "check the names and coordinates"))
    covariance = solved.covariance * (max(factor, 1.0) if doubt is not None else 1.0)
    said = [f"target {pairs.names[i]} was left out as a blunder: |w| {np.abs(tests[1, i]).max():.3g}" for i in blunders]
    said += _words(pairs, used, factor, p_value, covariance, doubt)
    residuals = (pairs.reference - pivot) - ((pairs.current @ T[:3, :3].T) + (T[:3, 3] - pivot))
    return TargetFit(
        names=pairs.names,
        T_ref_cur=T,
        pivot=pivot,
        covariance=covariance,
        residuals=residuals,
        redundancy=tests[0],
        w=tests[1],
        detectable=tests[2],
        used=used,
        blunders=named,
        critical=limit,
        variance_factor=factor,
        p_value=p_value,
        redundant=redundant,
        warnings=tuple(said),
    )


def _global_test(total: float, redundant: int) -> tuple[float, float]:
    """A-posteriori variance factor and the two-sided probability of one as odd (chi-square)."""
    from scipy.stats import chi2

    return total / redundant, float(2 * min(chi2.sf(total, redundant), chi2.cdf(total, redundant)))


def _words(
    pairs: Pairs, used: BoolArray, factor: float, p_value: float, covariance: FloatArray, doubt: str | None
) -> list[str]:
    """Say what contradicts, what the deviations should have been, and how the targets are arranged."""
    said = []
    if doubt is not None:
        said.append(
            f"targets contradict one another, {doubt} most, and too few are left to tell which is wrong: their "
            "covariance was multiplied by the variance factor"
        )
    if p_value < GLOBAL_ALPHA:
        verdict = "smaller" if factor > 1 else "larger"
        said.append(
            f"residuals of the targets are {np.sqrt(factor):.2g} times what their standard deviations say (variance "
            f"factor {factor:.3g}, p = {p_value:.2g}): the standard deviations were given {verdict} than they are"
        )
    turn = float(np.sqrt(np.linalg.eigvalsh(covariance[:3, :3])[-1]))
    reach = float(np.linalg.norm(np.ptp(pairs.reference[used], axis=0)))
    if turn * reach > WEAK_TURN * float(pairs.noise()[used].mean()):
        said.append(
            f"the targets lie nearly on one line: the turn about it is known to {turn * 1e3:.2g} mrad, "
            f"{turn * reach * 1e3:.2g} mm at {reach:.3g} m off it"
        )
    return said
