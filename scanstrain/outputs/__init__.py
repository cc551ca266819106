# SPDX-License-Identifier: MIT
"""Everything that is written from a result, each kind of output in its own file.

The summary is `scanstrain.outputs.summary.summary`; it has no second name here because the module has that one.
"""

from scanstrain.outputs.cloud import recolour
from scanstrain.outputs.findings import verdict
from scanstrain.outputs.folder import check_folder
from scanstrain.outputs.write import OUTPUTS, write_result

__all__ = ["OUTPUTS", "check_folder", "recolour", "verdict", "write_result"]
