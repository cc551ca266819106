# SPDX-License-Identifier: MIT
"""Which tables of colours suit which kind of quantity, and which one is taken unless another is named.

All are F. Crameri's, through `cmcrameri`: perceptually even and readable with colour-vision deficiency. Those that come
too near to the greys of "not observable" and "not significant" are left out; a test measures it.
"""

from __future__ import annotations

from scanstrain.attributes import Attribute
from scanstrain.errors import OptionError, explain
from scanstrain.registry import unknown_name

REVERSED = "_r"
"""After a name: the same table from its end to its beginning."""
_SPREAD = ("vik", "roma", "broc", "cork", "bam", "lisbon", "tofino", "berlin", "vanimo", "managua")
_RISING = (
    "lajolla", "imola", "acton", "batlow", "hawaii", "buda", "navia", "glasgow", "lipari", "nuuk", "devon", "bamako",
    "davos", "bilbao", "lapaz", "oslo", "tokyo",
)  # fmt: skip
_ROUND = ("romaO", "vikO", "brocO", "corkO")

SUITED = {
    "signed": _SPREAD, "magnitude": _RISING, "error": _RISING, "probability": _RISING, "place": _RISING,
    "code": _RISING,
}  # fmt: skip
"""Tables by kind: from one hue over a pale or dark middle to another for signed quantities, rising for the others."""
DEFAULT = {
    "signed": "vik", "magnitude": "lajolla_r", "error": "imola", "probability": "acton", "place": "batlow",
    "code": "batlow_r",
}  # fmt: skip
DEFAULT_ROUND = "romaO"
"""Angles go round, so their colours do as well."""


def map_for(attribute: Attribute, name: str | None = None) -> str:
    """Name the table of colours for an attribute.

    Parameters
    ----------
    attribute : Attribute
        A number or a count; codes with a meaning each have colours of their own.
    name : str, optional
        Table that the user wants; with `_r` at its end it runs the other way.

    Returns
    -------
    str
        As `cmcrameri` knows it.

    Raises
    ------
    OptionError
        A table that does not exist or does not suit the attribute; the nearest name is suggested.
    """
    turning = attribute.kind == "place" and attribute.unit == "rad"
    if name is None:
        return DEFAULT_ROUND if turning else DEFAULT[attribute.kind]
    known = _ROUND if turning else SUITED[attribute.kind]
    if name.removesuffix(REVERSED) not in known:
        raise OptionError(unknown_name(f"colour map of {attribute.name}", name, list(known)))
    return name


def no_map(attribute: Attribute, name: str) -> OptionError:
    """Say that a code takes no table of colours."""
    where = f"colour map of {attribute.name}"
    return OptionError(explain(where, "none, because it is a code", repr(name), "leave it out"))
