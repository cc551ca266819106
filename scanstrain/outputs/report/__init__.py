# SPDX-License-Identifier: MIT
"""Pages for people: the report of one comparison, and the overview of a batch."""

from scanstrain.outputs.report.index import write_index
from scanstrain.outputs.report.rates import Compared
from scanstrain.outputs.report.series_pages import show_series
from scanstrain.outputs.report.write import write_report

__all__ = ["Compared", "show_series", "write_index", "write_report"]
