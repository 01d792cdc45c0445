"""The command line: each command reads its arguments, calls one function of the library and prints."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from enum import StrEnum
from pathlib import Path
from typing import Annotated, Any, NoReturn

import typer

from designer.errors import AliquotError, Problem, StudyFileError

app = typer.Typer(
    name="aliquot",
    help="Plan a kinetics study: which runs and sampling times tell rate laws apart and pin down k.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)

FAILED = 2  # exit status of every expected error
STOPPED = 130  # exit status after Ctrl-C, as shells have it
BAR = 30  # characters of a bar of progress
SMALL_STUDIES = 100  # virtual studies of each candidate behind a figure when the effort is small
StudyPath = Annotated[Path, typer.Argument(metavar="STUDY", help="the study's folder, or its study.toml")]


class HowHard(StrEnum):
    """Settings of a search: full, or small for a first look."""

    full = "full"
    small = "small"


class Precision(StrEnum):
    """What counts as precision: every constant together, or the asked ones."""

    D = "D"
    c = "c"


AsJson = Annotated[bool, typer.Option("--json", help="print one JSON document and nothing else")]


def main() -> None:
    """Entry point of ``aliquot``."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(encoding="utf-8", errors="replace")
    try:
        sys.exit(app(prog_name="aliquot", standalone_mode=False))
    except typer.Abort:
        sys.exit(STOPPED)
    except Exception as error:
        if not hasattr(error, "format_message"):  # only a command that was typed wrongly has one
            raise
        sys.exit(_mistyped(error))


def _mistyped(error: Any) -> int:
    """Say what is wrong with the command as typed, on standard error or as the one JSON document."""
    if "--json" not in sys.argv:
        error.show()
        return FAILED
    try:
        fail([Problem("", error.format_message())], as_json=True)
    except typer.Exit:
        return FAILED


@app.callback()
def _aliquot() -> None:
    """Without this a single command would lose its name."""


@contextmanager
def told(as_json: bool) -> Iterator[None]:
    """Turn every expected error into one message and exit status 2."""
    try:
        yield
    except StudyFileError as error:
        fail(error.problems, as_json, error.source)
    except AliquotError as error:
        fail([Problem("", str(error))], as_json)
    except OSError as error:
        what = error.strerror or str(error)
        fail([Problem(str(error.filename or ""), what[:1].lower() + what[1:])], as_json)


def fail(problems: Any, as_json: bool, source: str = "") -> NoReturn:
    """Report problems (on standard error, or as the one JSON document) and exit with status 2."""
    if as_json:
        from designer.checkdocument import error_document

        emit(error_document(problems, source))
    else:
        for problem in problems:
            head = f"{source}: " if source else ""
            typer.echo(f"aliquot: {head}{problem}", err=True)
    raise typer.Exit(FAILED)


def emit(document: dict[str, Any]) -> None:
    """Print the one JSON document of a command."""
    typer.echo(json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False))


def keep_compiled() -> None:
    """Keep compiled kernels in the user's cache folder; without, where that cannot be written."""
    from designer import arrays

    folder = cache_folder() / "compiled"
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError:
        return
    if os.access(folder, os.W_OK):
        arrays.keep_compiled(folder)


def cache_folder() -> Path:
    """Where this platform keeps what can be made again."""
    if os.environ.get("XDG_CACHE_HOME"):
        return Path(os.environ["XDG_CACHE_HOME"]) / "aliquot"
    if sys.platform == "win32":
        return Path(os.environ.get("LOCALAPPDATA", Path.home())) / "aliquot" / "cache"
    if sys.platform == "darwin":
        return Path.home() / "Library" / "Caches" / "aliquot"
    return Path.home() / ".cache" / "aliquot"


def progress() -> Callable[[str], None] | None:
    """A line on the terminal that says what is being worked on; nothing where nobody watches."""
    if not sys.stderr.isatty():
        return None
    return lambda what: typer.echo(f"\r\033[K{what} ...", err=True, nl=False)


def cleared() -> None:
    """Take the line of ``progress`` away."""
    if sys.stderr.isatty():
        typer.echo("\r\033[K", err=True, nl=False)


@app.command()
def new(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="folder to make for the study")],
    like: Annotated[str, typer.Option(metavar="TEMPLATE", help="template to start from")] = "aliquots",
    as_json: AsJson = False,
) -> None:
    """Start a study: write a commented study file to fill in."""
    from designer import templates

    with told(as_json):
        text = templates.text(like)
        file = folder / "study.toml"
        folder.mkdir(parents=True, exist_ok=True)
        try:
            with file.open("x", encoding="utf-8") as stream:
                stream.write(text)
        except FileExistsError:
            advice = "Nothing was changed; choose another folder"
            fail([Problem(str(file), "there is a study here already", advice=advice)], as_json)
        if as_json:
            from designer.checkdocument import new_document

            emit(new_document(file, like))
        else:
            typer.echo(f"Wrote {file} (template '{like}').")
            typer.echo(f"Put in your own numbers, then: aliquot check {folder}")


@app.command()
def check(
    study: StudyPath,
    as_json: AsJson = False,
    figure: Annotated[
        bool, typer.Option(help="draw the predicted curves into STUDY/figures/check.png")
    ] = True,
) -> None:
    """Check a study file and say back what it means.

    Laws, half-lives, predicted curves, where the error of a sample comes from, and cautions.
    """
    with told(as_json):
        from designer import studyfile
        from designer.loading import load_study

        loaded = load_study(study)
        keep_compiled()
        from designer.checkup import checkup

        found = checkup(loaded, progress())
        cleared()
        drawn = None
        if figure:
            from designer.figures import check_figure

            drawn = studyfile.locate(study).parent / "figures" / "check.png"
            drawn.parent.mkdir(exist_ok=True)
            check_figure(loaded, found).savefig(drawn, metadata={"Software": None})
        if as_json:
            from designer.checkdocument import check_document

            emit(check_document(loaded, found, drawn))
        else:
            from designer.checksheet import check_sheet

            typer.echo(check_sheet(loaded, found))
            if drawn is not None:
                typer.echo(f"\nFigure: {drawn}")


def bar() -> Callable[[str, int, int], None] | None:
    """A bar on the terminal for each stage of a plan; nothing where nobody watches."""
    if not sys.stderr.isatty():
        return None

    def show(stage: str, done: int, total: int) -> None:
        full = BAR * done // max(total, 1)
        drawn = f"[{'#' * full}{'.' * (BAR - full)}] {done}/{total}"
        typer.echo(f"\r\033[K{stage:<24} {drawn}", err=True, nl=False)

    show("reading the study", 0, 1)
    return show


@app.command()
def plan(
    study: StudyPath,
    seed: Annotated[int, typer.Option(help="the same seed gives the same plan")] = 1,
    weight_on_law: Annotated[
        float | None,
        typer.Option(
            help="telling laws apart (1) against precision (0); default: the file's", metavar="0..1"
        ),
    ] = None,
    precision: Annotated[
        Precision, typer.Option(help="count as precision all constants (D) or the asked ones (c)")
    ] = Precision.c,
    compare: Annotated[
        list[Path] | None,
        typer.Option(metavar="FILE", help="plan CSV to rate beside it; may be given more than once"),
    ] = None,
    effort: Annotated[HowHard, typer.Option(help="how hard to search")] = HowHard.full,
    as_json: AsJson = False,
) -> None:
    """Choose runs and sampling times; write the run sheet into STUDY/plans/NNN."""
    with told(as_json):
        from designer import planfiles, studyfile
        from designer.loading import load_study

        loaded = load_study(study)
        planfiles.ready(studyfile.locate(study).parent)
        others = [planfiles.read_schedule(file, loaded) for file in compare or ()]
        show = bar()
        keep_compiled()
        from designer import planfigure, planning, runsheet
        from designer.search import Effort

        found = planning.plan(
            loaded,
            seed=seed,
            weight_on_law=weight_on_law,
            precision_by=precision.value,
            compare=others,
            effort=Effort() if effort is HowHard.full else Effort.small(),
            studies=planning.STUDIES if effort is HowHard.full else SMALL_STUDIES,
            progress=show,
        )
        cleared()
        sheet = runsheet.text(loaded, found)
        drawn = planfigure.png(planfigure.plan_figure(loaded, found))
        written = planfiles.write(studyfile.locate(study).parent, loaded, found, sheet, drawn)
        if as_json:
            from designer.documents import plan_document

            emit({**plan_document(loaded, found), "folder": str(written)})
        else:
            typer.echo(sheet, nl=False)
            typer.echo(f"\nWritten to {written}: run-sheet.txt, plan.csv, plan.json, plan.png")
