# SPDX-License-Identifier: MIT
"""Published classes of tensile strain for masonry buildings, for those who ask for them by name."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

BOSCARDIN_CORDING: Mapping[str, float] = {
    "very slight": 0.0005,
    "slight": 0.00075,
    "moderate": 0.0015,
    "severe or very severe": 0.003,
}
"""Tensile strain [1] at which each class begins; below the first one damage is negligible (Boscardin and Cording 1989,
after Burland, Broms and de Mello 1977)."""

CLASSES: Mapping[str, Mapping[str, float]] = {"boscardin_cording_1989": BOSCARDIN_CORDING}
"""Published sets of classes by name: class to lower end [1]."""

CAUTIONS: Mapping[str, tuple[str, ...]] = {
    "boscardin_cording_1989": (
        "Strain classes after Boscardin and Cording (1989) were derived from masonry and brick-bearing-wall buildings "
        "above moving ground, and from how easily they are repaired; they do not hold for tunnel linings, dams or "
        "reinforced concrete.",
        "Each class holds its lower end and not its upper one: 500 microstrain is very slight, 3000 is severe. The "
        "publication leaves the ends open.",
        "They are classes of tensile strain: compression counts as negligible here, whatever harm it does. Strain "
        "alone cannot tell severe from very severe.",
        "Where the damage lies in the structure counts as well; crack width is one aspect only; and damage up to "
        "slight has many causes besides movement of the ground.",
    ),
}
"""Sentences that belong to every result with these classes."""


def tensile_class(strain: ArrayLike) -> NDArray[np.int64]:
    """Number of the class of a tensile strain after Boscardin and Cording (1989), lower ends included.

    Parameters
    ----------
    strain : array of shape (...)
        Largest tensile strain [1], tension positive.

    Returns
    -------
    ndarray of shape (...), int64
        0 negligible, 1 very slight, 2 slight, 3 moderate, 4 severe or very severe; -1 for NaN.

    Examples
    --------
    >>> tensile_class([-0.01, 0.0004999, 0.0005, 0.003]).tolist()
    [0, 0, 1, 4]
    """
    strain = np.asarray(strain, float)
    ends = np.array(list(BOSCARDIN_CORDING.values()))
    return np.where(np.isnan(strain), -1, np.searchsorted(ends, strain, side="right"))
