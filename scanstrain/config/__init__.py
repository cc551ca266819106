# SPDX-License-Identifier: MIT
"""Options: strict models, TOML in, every fault of a file at once, starter file and schema out."""

from scanstrain.config.batch_file import BatchConfig, ComparisonEntry, EpochEntry
from scanstrain.config.load import check_batch, config_from_options, load_config, option_names, sites_of
from scanstrain.config.models import (
    CompareConfig,
    NeighbourhoodOptions,
    RegistrationOptions,
    StrainOptions,
)
from scanstrain.config.output import OutputOptions
from scanstrain.config.patterns import Site

__all__ = [
    "BatchConfig",
    "CompareConfig",
    "ComparisonEntry",
    "EpochEntry",
    "NeighbourhoodOptions",
    "OutputOptions",
    "RegistrationOptions",
    "Site",
    "StrainOptions",
    "check_batch",
    "config_from_options",
    "load_config",
    "option_names",
    "sites_of",
]
