# SPDX-License-Identifier: MIT
"""First stage: the rigid motion between two epochs, on stable ground, with its covariance."""

from scanstrain.registration.align import register
from scanstrain.registration.result import Registration, WeakDirection
from scanstrain.registration.rigid import rigid_fit

__all__ = ["Registration", "WeakDirection", "register", "rigid_fit"]
