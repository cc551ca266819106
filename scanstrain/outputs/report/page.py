# SPDX-License-Identifier: MIT
"""From a template and its values to one page that loads nothing."""

from __future__ import annotations

import base64
import hashlib
import re
from importlib import resources
from typing import Any

FOLDER = "scanstrain.outputs.report"
_SCRIPT = re.compile(r"<script>(.*?)</script>", re.DOTALL)


def render(template: str, **values: Any) -> str:
    """Fill a template; every value is escaped, and one that is missing is an error.

    Parameters
    ----------
    template : str
        Name of the file in `templates/`.
    **values
        What the template asks for. `view`, where there is one, is the finished fragment of the 3-D view.

    Returns
    -------
    str
        A page that is allowed to run its own scripts and to load nothing.
    """
    # scripts and style are read as files, so that the hashes are those of what the page holds
    own = asset("tables.js")
    policy = _policy([own, *_SCRIPT.findall(values.get("view") or "")])
    return fragment(template, style=asset("page.css"), script=own, policy=policy, **values)


def fragment(template: str, **values: Any) -> str:
    """Fill a template that is a piece of a page; every value is escaped, and one that is missing is an error."""
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader(FOLDER), autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    return environment.get_template(template).render(**values)


def asset(name: str) -> str:
    """Read a file that stands beside this module."""
    return (resources.files(FOLDER) / name).read_text(encoding="utf-8")


def _policy(scripts: list[str]) -> str:
    """Write the content security policy: nothing but these scripts, inline style and pictures inside the page."""
    hashes = [base64.b64encode(hashlib.sha256(text.encode()).digest()).decode() for text in scripts]
    allowed = " ".join(f"'sha256-{each}'" for each in hashes)
    return (
        "default-src 'none'; base-uri 'none'; form-action 'none'; img-src data:; style-src 'unsafe-inline'; "
        f"script-src {allowed}"
    )
