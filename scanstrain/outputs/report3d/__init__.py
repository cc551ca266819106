# SPDX-License-Identifier: MIT
"""The coloured cloud as an interactive view inside a page that needs no network."""

from scanstrain.outputs.report3d.fragment import scene_html
from scanstrain.outputs.report3d.scene import SceneData, scene_data

__all__ = ["SceneData", "scene_data", "scene_html"]
