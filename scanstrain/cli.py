# SPDX-License-Identifier: MIT
"""The commands: each loads its options, calls one function of the library, and echoes what came.

Imports of the library stand inside the commands, because `--help` and completion shall answer at once.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import click

from scanstrain.terminal import (
    FAILED,
    PARTLY_FAILED,
    Terminal,
    guarded,
    json_option,
    quiet_option,
    verbose_option,
)

# Whether a file is there and can be read, the library says, in the one form that all messages have.
PATH = click.Path(path_type=Path, readable=False)


class NumberOrWord(click.ParamType[float | str]):
    """A number, or a word such as `auto`; which of them an option takes, and the limits, the option models know."""

    name = "number"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float | str:  # noqa: ARG002
        """Return a float where the text is one."""
        try:
            return float(value)
        except ValueError:
            return str(value)


def loudness(command: Callable[..., Any]) -> Callable[..., Any]:
    """Add the options that every command has."""
    return verbose_option(quiet_option(command))  # type: ignore[no-any-return]


def as_option(name: str) -> str:
    """Spell an option as the command line does."""
    return "--" + name.replace("_", "-")


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="scanstrain")
@json_option
@loudness
def cli() -> None:
    """Where, how much and in which direction a structure stretched, sheared, bent or turned between two laser scans.

    Exit codes: 0 done; 1 the run failed; 2 the call or the configuration is wrong; 3 done, but a comparison of the
    batch failed; 130 interrupted.
    """


FRESH = click.option("--fresh", is_flag=True, help="Forget what is there already, and compute everything.")


@cli.command()
@click.argument("config", type=PATH)
@click.option(
    "--workers", type=click.IntRange(min=1), help="Comparisons at a time; by default what the machine carries."
)
@click.option("--scheduler", metavar="ADDRESS", help="Dask scheduler whose workers do it all, such as tcp://host:8786.")
@click.option("--only", multiple=True, metavar="LABEL", help="Only what has this epoch or place; may be repeated.")
@FRESH
@json_option
@loudness
@click.pass_obj
def run(terminal: Terminal, /, config: Path, only: tuple[str, ...], **options: Any) -> int:
    """Run every comparison of the batch file CONFIG.

    What is done already stays, and a run that was stopped goes on where it was.
    """
    from scanstrain.batch import batch_points, outcomes_data, run_batch
    from scanstrain.config import load_config
    from scanstrain.evolution import evolutions_data, follow_batch
    from scanstrain.screens import batch_screen

    batch = load_config(config)
    with terminal.progress(batch_points(batch, only)) as progress:
        outcomes = run_batch(batch, only=only, progress=progress, finished=terminal.finished, **options)
    series = follow_batch(batch, outcomes, write=not only)
    notes = [note for each in series.values() for note in each.notes]
    data = {**outcomes_data(outcomes), "series": evolutions_data(series)}
    terminal.show(batch_screen(outcomes, batch.output.folder, notes=notes), data)
    for outcome in outcomes:
        if not outcome.done:
            terminal.complain(f"{outcome.name}: {outcome.error}", outcome.details)
    return 0 if all(outcome.done for outcome in outcomes) else PARTLY_FAILED


@cli.command()
@click.argument("reference", type=PATH)
@click.argument("current", type=PATH)
@click.option("--out", "folder", type=PATH, required=True, help="Folder for the result.")
@click.option("--gauge-length", type=NumberOrWord(), help="Diameter of a gauge [m], or auto.")
@click.option("--gauge-spacing", type=NumberOrWord(), help="Distance between gauges [m], or auto.")
@click.option("--structure", metavar="tunnel|wall|free", help="Names the axes u and v.")
@click.option("--thickness", type=NumberOrWord(), help="Of the lining or wall [m], for bending strain.")
@click.option("--measure", metavar="NAME", help="Strain measure: auto, small, green_lagrange, almansi, hencky, biot.")
@click.option("--colour-by", metavar="ATTRIBUTE", help="Attribute that colours the points.")
@click.option("--no-data", type=NumberOrWord(), help="Number for missing values, in place of NaN.")
@click.option("--assume-same-crs", is_flag=True, help="Compare although the stated coordinate systems differ.")
@FRESH
@json_option
@loudness
@click.pass_obj
def compare(
    terminal: Terminal,
    /,
    reference: Path,
    current: Path,
    folder: Path,
    assume_same_crs: bool,
    fresh: bool,
    **options: Any,
) -> None:
    """Compare the scan CURRENT with the earlier scan REFERENCE.

    All other options stand in a configuration file: see `scanstrain config new`.
    """
    from scanstrain.comparison import compare_alone
    from scanstrain.config import config_from_options
    from scanstrain.io.count import expected_points
    from scanstrain.screens import comparison_screen

    given = {name: value for name, value in options.items() if value is not None}
    config = config_from_options(given, spelling=as_option)
    with terminal.progress(expected_points(reference) + expected_points(current)) as progress:
        done = compare_alone(
            reference, current, config, folder, assume_same_crs=assume_same_crs, fresh=fresh, progress=progress
        )
    terminal.compared(done)
    title = f"{reference.name} to {current.name}"
    terminal.show(comparison_screen(title, folder, done.summary, verbose=terminal.verbose), done.summary)


@cli.command()
@click.argument("scans", type=PATH, nargs=-1, required=True, metavar="SCAN...")
@json_option
@loudness
@click.pass_obj
def inspect(terminal: Terminal, scans: tuple[Path, ...]) -> int:
    """Say what is in each SCAN.

    Whether it can serve and, with several, how much of it the first one shows.
    """
    from dataclasses import asdict

    from scanstrain.inspection import inspect_files
    from scanstrain.screens import inspection_screen

    found = inspect_files(scans)
    terminal.show("\n\n".join(map(inspection_screen, found)), [asdict(each) for each in found])
    for each in found:
        if each.refusal:
            terminal.complain(each.refusal)
    return FAILED if any(each.refusal for each in found) else 0


@cli.command()
@click.option("--spacing", type=float, default=0.005, show_default=True, help="Between points on the surface [m].")
@click.option("--noise", type=float, default=0.002, show_default=True, help="Of one point along the normal [m], 1 sd.")
@click.option("--gauge-length", type=float, default=0.5, show_default=True, help="Diameter of a gauge [m].")
@click.option("--contrast", type=float, default=0.0, show_default=True, help="Spread of texture over intensity noise.")
@click.option("--texture-length", type=float, default=0.03, show_default=True, help="Correlation length [m].")
@click.option("--shared", type=float, default=0.2, show_default=True, help="Share of noise variance that points share.")
@click.option("--shared-length", type=float, default=0.05, show_default=True, help="Over which they share it [m].")
@click.option("--datum-sd", type=float, default=0.0, show_default=True, help="Of the registration at the place [m].")
@click.option("--thickness", type=float, help="Of the lining or wall [m], for bending strain.")
@json_option
@loudness
@click.pass_obj
def forecast(terminal: Terminal, /, **plan: Any) -> None:
    """Say, before going to site, the smallest changes that a planned set-up can show."""
    from scanstrain.forecast import SetUp
    from scanstrain.forecast import forecast as look_ahead
    from scanstrain.plan_screens import forecast_data, forecast_screen

    setup = SetUp(**plan)
    found = look_ahead(setup)
    terminal.show(forecast_screen(setup, found), forecast_data(setup, found))


@cli.command()
@click.argument("config", type=PATH)
@click.option("--only", multiple=True, metavar="LABEL", help="Split this epoch; may be repeated. Default: the first.")
@click.option("--still", nargs=2, metavar="LABEL LABEL", help="Two epochs that are known to show no change.")
@click.option("--strain", type=float, help="Strain that is put in [1]; by default five standard errors.")
@click.option("--height", type=float, help="Bulge that is put in [m]; by default five standard errors.")
@click.option("--seed", type=int, default=0, show_default=True, help="Of the split into halves.")
@json_option
@loudness
@click.pass_obj
def prove(terminal: Terminal, /, config: Path, **choice: Any) -> None:
    """Hold the method against the scans of the batch file CONFIG.

    Counts false alarms between two halves of a scan, then puts a known change into one and looks what comes back.
    """
    from scanstrain.config import load_config
    from scanstrain.plan_screens import proof_data, proof_screen
    from scanstrain.proof import prove_batch

    batch = load_config(config)
    with terminal.progress() as progress:
        proofs = prove_batch(batch, progress=progress, **choice)
    terminal.show("\n\n".join(map(proof_screen, proofs)), [proof_data(each) for each in proofs])


@cli.command()
@click.argument("cloud", type=PATH)
@click.option("--by", "attribute", required=True, metavar="ATTRIBUTE", help="Attribute that gives the colour.")
@click.option("--limits", type=float, nargs=2, metavar="LOW HIGH", help="Ends of the scale, in the unit of the file.")
@click.option("--map", "colour_map", metavar="NAME", help="Table of colours, by its name in cmcrameri.")
@click.option("--only-significant", is_flag=True, help="Colour only what survived false-discovery control.")
@click.option("--ply/--no-ply", default=True, show_default=True, help="Write the cloud as binary PLY too.")
@click.option("--out", type=PATH, help="Folder for the files; by default the one of CLOUD.")
@json_option
@loudness
@click.pass_obj
def colour(
    terminal: Terminal,
    cloud: Path,
    attribute: str,
    limits: tuple[float, float] | None,
    colour_map: str | None,
    only_significant: bool,
    ply: bool,
    out: Path | None,
) -> None:
    """Colour the result CLOUD by another attribute.

    Writes a copy, and its colour key as a picture.
    """
    from scanstrain.outputs import recolour

    written = recolour(
        cloud, attribute, limits=limits, colour_map=colour_map, only_significant=only_significant, ply=ply, out=out
    )
    terminal.show_files(written)


@cli.command()
@click.argument("folder", type=PATH)
@json_option
@loudness
@click.pass_obj
def sample(terminal: Terminal, folder: Path) -> None:
    """Write demonstration scans into FOLDER.

    With what really happened in them, in TRUTH.md, and batch files that run on them as they are.
    """
    from scanstrain.config.demonstration import write_demonstration

    terminal.show_files(write_demonstration(folder))


@cli.group()
def config() -> None:
    """Write, check or describe batch files."""


@config.command("new")
@click.argument("file", type=PATH, required=False)
@click.argument("scans", type=PATH, nargs=-1, metavar="[SCAN]...")
@loudness
@click.pass_obj
def new(terminal: Terminal, file: Path | None, scans: tuple[Path, ...]) -> None:
    """Write a commented batch file.

    To FILE, or to standard output if there is none; each SCAN becomes an epoch.
    """
    from scanstrain.config.starter import starter_text, write_starter

    if file is None:
        click.echo(starter_text(), nl=False)
    else:
        terminal.show_files([write_starter(file, scans)])


@config.command()
@click.argument("file", type=PATH)
@loudness
@click.pass_obj
def check(terminal: Terminal, file: Path) -> None:
    """Check the batch file FILE without running it.

    Every key is looked at, and whether the scans are there.
    """
    from scanstrain.config import check_batch

    terminal.show("\n".join(check_batch(file)), None)


@config.command()
@loudness
def schema() -> None:
    """Print the JSON Schema of batch files, for editors."""
    import json

    from scanstrain.config import BatchConfig

    click.echo(json.dumps(BatchConfig.model_json_schema(), indent=2, ensure_ascii=False))


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the program and return its exit code."""
    return guarded(cli, arguments)
