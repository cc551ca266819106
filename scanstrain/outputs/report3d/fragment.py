# SPDX-License-Identifier: MIT
"""The piece of a page that holds the view: its picture, its data, its script."""

from __future__ import annotations

import html
import re
from importlib import resources

from scanstrain.errors import OptionError, explain
from scanstrain.outputs.report3d.scene import SceneData

_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_-]*")
_PICTURE = re.compile(r"data:image/(png|jpeg|webp|svg\+xml);base64,[A-Za-z0-9+/=]+")


def scene_html(scene: SceneData, *, element_id: str = "view", picture: str | None = None, alt: str = "") -> str:
    """Write the view as a fragment of a page; it loads nothing.

    The colours of the page come from its CSS variables `--ink`, `--faint`, `--rule`, `--paper`, `--accent` and
    `--stage` (the ground under the cloud), or, where it has none, from a light and a dark set of our own.

    Parameters
    ----------
    scene : SceneData
        From `scene_data`.
    element_id : str
        Id of the element.
    picture : str, optional
        Data URI of a picture of the same cloud, shown where the view cannot be drawn and in print.
    alt : str
        What the picture shows, for those who do not see it.

    Returns
    -------
    str
        HTML of one section element.

    Raises
    ------
    OptionError
        The id is not a plain name, or the picture is not a data URI of an image.
    """
    if not _NAME.fullmatch(element_id):
        raise OptionError(explain("element_id", "letters, digits, - and _", repr(element_id), "give for example view"))
    if picture is not None and not _PICTURE.fullmatch(picture):
        got = repr(picture[:40])
        raise OptionError(explain("picture", "a base64 data URI of an image", got, "encode the bytes of a PNG"))
    shown = "" if picture is None else f'<img src="{picture}" alt="{html.escape(alt)}">'
    return (
        f'<section class="cloud-view" id="{element_id}" aria-label="Interactive view of the coloured cloud">\n'
        f"<style>{_asset('view.css')}</style>\n"
        f'<figure class="cv-picture">{shown}<figcaption>This view needs JavaScript and WebGL.</figcaption></figure>\n'
        f'<script type="application/json">{scene.text}</script>\n'
        f"<script>{_asset('view.js')}</script>\n"
        "</section>\n"
    )


def _asset(name: str) -> str:
    return (resources.files("scanstrain.outputs.report3d") / name).read_text(encoding="utf-8")
