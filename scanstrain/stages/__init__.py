# SPDX-License-Identifier: MIT
"""Results of stages kept in files, so that a stopped run goes on and a changed option redoes only what hangs on it."""

from scanstrain.stages.keys import STAGES, stage_keys
from scanstrain.stages.store import StageStore

__all__ = ["STAGES", "StageStore", "stage_keys"]
