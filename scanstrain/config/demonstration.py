# SPDX-License-Identifier: MIT
"""Batch files for the demonstration scans."""

from __future__ import annotations

import datetime as dt
from pathlib import Path

from scanstrain.config.starter import StarterEpoch, starter_text
from scanstrain.errors import OptionError, explain
from scanstrain.outputs.folder import check_folder

_HOW = (
    "A line that begins with #, and would otherwise set a key, shows the default: remove the # to change it. "
    "Lengths in metres, angles in radians, strains as plain numbers (1e-6 is one microstrain)."
)
_SCENES = {
    "adit": (
        "A service adit: three epochs of its lining, each compared with the first. Run it with: scanstrain"
        " run adit.toml. What really happened there stands in TRUTH.md beside the scans.",
        {"march": (3, 4), "june": (6, 10), "september": (9, 12)},
        {"comparisons": "first", "structure": "tunnel", "gauge_length": 0.8},
    ),
    "wall": (
        "A yard wall, before and after. Run it with: scanstrain run wall.toml. What really happened there "
        "stands in TRUTH.md beside the scans.",
        {"march": (3, 5), "september": (9, 13)},
        {"comparisons": "first", "structure": "wall", "gauge_length": 0.8},
    ),
}
_YEAR = 2031


def demonstration_configs(*, clouds: str, results: str) -> dict[str, str]:
    """Return the batch files of the demonstration scenes, by file name.

    Parameters
    ----------
    clouds, results : str
        Folders of the scans and of the results as seen from the batch files, with a slash at the end or empty.
    """
    texts = {}
    for scene, (story, days, chosen) in _SCENES.items():
        dates = {label: dt.date(_YEAR, *day) for label, day in days.items()}
        epochs = [StarterEpoch(label, f"{clouds}{scene}_{date}.laz", date) for label, date in dates.items()]
        heading = f"{story} {_HOW}"
        texts[f"{scene}.toml"] = starter_text(epochs, heading=heading, folder=f"{results}{scene}", chosen=chosen)
    return texts


def write_demonstration(folder: Path) -> list[Path]:
    """Write the demonstration scans, what really happened in them, and the batch files that run on them.

    Raises
    ------
    OptionError
        A batch file with other content is there: somebody edited it. Or the place is a file.
    """
    from scanstrain.synthetic import write_sample

    texts = {folder / name: text for name, text in demonstration_configs(clouds="", results="results/").items()}
    for path, text in texts.items():
        if path.exists() and path.read_text(encoding="utf-8") != text:
            remedy = "choose another folder, or move the file away"
            raise OptionError(explain(str(path), "no file of your own there", "a changed one", remedy))
    place = check_folder(folder)
    written = write_sample(place)
    for path, text in texts.items():
        path.write_text(text, encoding="utf-8", newline="\n")
    return [*(folder / path.name for path in written), *texts]
