"""The command line: arguments in, files and exit status out. Each command is one method of a study.

Exit status: 0 every objective met, 1 ran but not all met (or proved impossible), 2 the file or the command is at
fault, 3 an internal fault.
"""

from __future__ import annotations

import functools
import io
import os
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from rich.status import Status

    from inverse.study.result import Result

MET, NOT_MET, AT_FAULT, INTERNAL, INTERRUPTED = 0, 1, 2, 3, 130


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="modewright", prog_name="modewright")
def main() -> None:
    """Turn wanted behaviour of coupled oscillators into the parts to order."""
    if isinstance(sys.stdout, io.TextIOWrapper):
        # A bar or a name that the encoding of a pipe lacks must not cost the run.
        sys.stdout.reconfigure(errors="replace")


def guarded(command: Callable[..., int]) -> Callable[..., None]:
    """Turn what a command returns or raises into an exit status and at most one line on standard error."""

    @functools.wraps(command)
    def run(*, debug: bool, **options: Any) -> None:
        from inverse.errors import InverseError

        try:
            status = command(**options)
        except InverseError as error:
            if debug:
                raise
            click.echo(f"modewright: {error}", err=True)
            status = AT_FAULT
        except KeyboardInterrupt:
            click.echo("modewright: interrupted; files of earlier runs are as they were", err=True)
            status = INTERRUPTED
        except Exception as error:
            if debug:
                raise
            words = f"{type(error).__name__}: {error}"[:300]
            click.echo(f"modewright: internal fault: {words}; run again with --debug for the whole of it", err=True)
            status = INTERNAL
        sys.exit(status)

    return run


def common(command: Callable[..., None]) -> Callable[..., None]:
    """The options that every command takes."""
    for option in (
        click.option("--debug", is_flag=True, help="Show the traceback of a fault."),
        click.option("--quiet", is_flag=True, help="Print nothing but faults."),
        click.option("--json", "as_json", is_flag=True, help="Print result.json instead of tables."),
        click.option("--seed", type=int, default=None, help="Instead of the seed of the study."),
        click.option("--out", type=click.Path(file_okay=False, path_type=Path), default=None,
                     help="Folder for the result; out/<study name> by default."),
    ):  # fmt: skip
        command = option(command)
    return command


STUDY = click.argument("study", type=click.Path(path_type=Path))


@main.command()
@STUDY
@common
@guarded
def size(study: Path, out: Path | None, seed: int | None, as_json: bool, quiet: bool) -> int:
    """Find parts whose assembly does what STUDY asks, and leave the result in a folder."""
    from inverse import load_study

    loaded = load_study(study)
    with working(quiet or as_json) as progress:
        result = loaded.size(seed=seed, progress=progress)
    return delivered(result, loaded.text, out, as_json, quiet)


@main.command()
@STUDY
@click.option(
    "--design",
    type=click.Path(file_okay=False, path_type=Path),
    help="Folder of an earlier result whose design is taken instead of the start values.",
)
@common
@guarded
def modes(study: Path, design: Path | None, out: Path | None, seed: int | None, as_json: bool, quiet: bool) -> int:
    """Compute the modes of the design as it stands and judge the objectives of STUDY by it."""
    from inverse import load_study
    from inverse.study.archive import load_result

    loaded = load_study(study)
    values = None if design is None else load_result(design).variables
    return delivered(loaded.modes(values, seed=seed), loaded.text, out, as_json, quiet)


@main.command()
@STUDY
@common
@guarded
def reach(study: Path, out: Path | None, seed: int | None, as_json: bool, quiet: bool) -> int:
    """Bound what each objective of STUDY can attain within the ranges, and prove it where they cannot all be met."""
    from inverse import load_study

    loaded = load_study(study)
    with working(quiet or as_json) as progress:
        result = loaded.reach(seed=seed, progress=progress)
    return delivered(result, loaded.text, out, as_json, quiet)


@main.command()
@STUDY
@click.option(
    "--design",
    type=click.Path(file_okay=False, path_type=Path),
    help="Folder of an earlier result whose design is taken instead of the start values.",
)
@common
@guarded
def tolerance(study: Path, design: Path | None, out: Path | None, seed: int | None, as_json: bool, quiet: bool) -> int:
    """Say what the tolerances of STUDY do to a design: share of builds that pass, worst builds, sensitivities."""
    from inverse import load_study
    from inverse.study.archive import load_result

    loaded = load_study(study)
    values = None if design is None else load_result(design).variables
    return delivered(loaded.tolerance(values, seed=seed), loaded.text, out, as_json, quiet)


@main.command()
@click.argument("folder", type=click.Path(file_okay=False, path_type=Path))
@common
@guarded
def report(folder: Path, out: Path | None, seed: int | None, as_json: bool, quiet: bool) -> int:
    """Write report.html again from the files in FOLDER; nothing is computed, so that --seed changes nothing."""
    from inverse.study.archive import STUDY_TEXT, load_result, read_text

    return delivered(load_result(folder), read_text(folder / STUDY_TEXT), out or folder, as_json, quiet)


@main.command()
@click.option("--debug", is_flag=True, help="Show the traceback of a fault.")
@guarded
def schema() -> int:
    """Print the JSON Schema of a study file."""
    import json

    from inverse.study.schema import json_schema

    say((json.dumps(json_schema(), indent=1, ensure_ascii=False) + "\n").encode())
    return MET


def delivered(result: Result, study_text: str, out: Path | None, as_json: bool, quiet: bool) -> int:
    """Write the files, print what was asked for, and return the exit status."""
    from inverse.report.page import render_page
    from inverse.study.archive import STUDY_TEXT, record_text, save_result
    from inverse.study.result import Status

    folder = Path("out") / result.study if out is None else out
    save_result(result, folder, {STUDY_TEXT: study_text, "report.html": render_page(result, study_text)})
    if as_json:
        # JSON is UTF-8 whatever the locale.
        say(record_text(result).encode())
    elif not quiet:
        from inverse.report.tables import print_summary, summary

        if sys.stdout.isatty():
            print_summary(result)
        else:
            say(summary(result) + "\n")
        say(f"\nwritten to {folder}: result.json, parts.csv, report.html\n")
    return MET if result.status is Status.MET else NOT_MET


def say(text: str | bytes) -> None:
    """Print; a reader that has seen enough and closed the pipe is no fault."""
    try:
        click.echo(text, nl=False)
    except BrokenPipeError:
        # Python flushes standard output once more as it ends.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


class working:
    """Words on a terminal about what is being done; silent in a pipe and for the first second."""

    def __init__(self, silent: bool) -> None:
        """Show only where somebody looks."""
        self.timer = None if silent or not sys.stderr.isatty() else threading.Timer(1.0, self._start)
        self.words = "working"
        self.status: Status | None = None

    def _start(self) -> None:
        from rich.console import Console

        self.status = Console(stderr=True).status(self.words)
        self.status.start()

    def __enter__(self) -> Callable[[str], None]:
        """Hand out the function that is told."""
        if self.timer is not None:
            self.timer.daemon = True
            self.timer.start()

        def tell(words: str) -> None:
            self.words = words
            if self.status is not None:
                self.status.update(words)

        return tell

    def __exit__(self, *_: object) -> None:
        """Clear the line."""
        if self.timer is not None:
            self.timer.cancel()
            self.timer.join()
        if self.status is not None:
            self.status.stop()
