"""The ``plan`` command: what it hands on, prints and writes. The planning itself is replaced by a plan
made by hand; the marked test below runs the real one."""

from __future__ import annotations

import json
import os
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import handmade
import pytest
from typer.testing import CliRunner

from designer import cli, planfiles, planning, runsheet

STUDY = handmade.STUDIES / "ester" / "study.toml"


@dataclass
class Called:
    """Arguments of every call of the planning."""

    with_: list[dict[str, Any]] = field(default_factory=list)


@pytest.fixture
def called(monkeypatch: pytest.MonkeyPatch) -> Called:
    seen = Called()

    def plan(study: Any, **arguments: Any) -> Any:
        seen.with_.append(arguments)
        return handmade.plan()

    monkeypatch.setattr(planning, "plan", plan)
    monkeypatch.setattr(cli, "keep_compiled", lambda: None)
    return seen


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "study.toml").write_bytes(STUDY.read_bytes())
    return tmp_path


def run(*arguments: object) -> Any:
    return CliRunner().invoke(cli.app, ["plan", *map(str, arguments)])


def test_it_prints_the_run_sheet_and_writes_four_files(called: Called, folder: Path) -> None:
    result = run(folder)
    sheet = runsheet.text(handmade.study(), handmade.plan())
    written = folder / "plans" / "001"
    assert result.exit_code == 0
    assert result.stdout == f"{sheet}\nWritten to {written}: run-sheet.txt, plan.csv, plan.json, plan.png\n"
    assert (written / "run-sheet.txt").read_text(encoding="utf-8") == sheet
    assert (written / "plan.png").read_bytes().startswith(b"\x89PNG")


def test_arguments_reach_the_planning(called: Called, folder: Path) -> None:
    (folder / "mine.csv").write_text(planfiles.csv_text(handmade.study(), handmade.schedule()))
    other = folder / "flooded.csv"
    other.write_text((folder / "mine.csv").read_text())
    options = ["--seed", 5, "--weight-on-law", 0.8, "--precision", "D", "--effort", "small"]
    files = ["--compare", folder / "mine.csv", "--compare", other]
    assert run(folder / "study.toml", *options, *files).exit_code == 0
    (seen,) = called.with_
    assert (seen["seed"], seen["weight_on_law"], seen["precision_by"]) == (5, 0.8, "D")
    assert [schedule.name for schedule in seen["compare"]] == ["mine", "flooded"]
    assert seen["studies"] < planning.STUDIES
    assert seen["progress"] is None  # nobody watches


def test_json_is_one_document_and_nothing_else(called: Called, folder: Path) -> None:
    result = run(folder, "--json")
    document = json.loads(result.stdout)
    assert document.pop("folder") == str(folder / "plans" / "001")
    assert document == json.loads((folder / "plans" / "001" / "plan.json").read_text(encoding="utf-8"))
    assert result.stderr == ""


def test_the_same_plan_gives_the_same_bytes(called: Called, folder: Path) -> None:
    assert run(folder).exit_code == run(folder).exit_code == 0
    first, second = folder / "plans" / "001", folder / "plans" / "002"
    names = sorted(path.name for path in first.iterdir())
    assert names == sorted(path.name for path in second.iterdir())
    assert all((first / name).read_bytes() == (second / name).read_bytes() for name in names)


def test_a_bad_file_to_compare_stops_before_planning(called: Called, folder: Path) -> None:
    (folder / "mine.csv").write_text("run,sample,time (min),ester (mM),hydroxide (mM)\n1,1,x,20,20\n")
    result = run(folder, "--compare", folder / "mine.csv")
    assert result.exit_code == 2 and result.stdout == ""
    assert result.stderr == (
        f"aliquot: {folder / 'mine.csv'}: line 2, column time (min): not understood; "
        "expected a number without its unit, found 'x'\n"
    )
    as_json = json.loads(run(folder, "--compare", folder / "mine.csv", "--json").stdout)
    assert as_json["document"] == "aliquot error" and len(as_json["problems"]) == 1
    assert called.with_ == [] and not (folder / "plans").exists()


def test_a_bar_is_shown_only_where_somebody_watches(monkeypatch: pytest.MonkeyPatch) -> None:
    shown: list[str] = []
    monkeypatch.setattr(cli.typer, "echo", lambda text, **_: shown.append(text))
    monkeypatch.setattr(cli.sys.stderr, "isatty", lambda: True, raising=False)
    bar = cli.bar()
    assert bar is not None
    bar("rating plans", 2, 4)
    assert shown[-1] == f"\r\033[K{'rating plans':<24} [{'#' * 15}{'.' * 15}] 2/4"
    monkeypatch.setattr(cli.sys.stderr, "isatty", lambda: False, raising=False)
    assert cli.bar() is None


@pytest.mark.slow
def test_the_same_seed_gives_the_same_bytes(folder: Path) -> None:
    assert run(folder, "--effort", "small").exit_code == 0
    assert run(folder, "--effort", "small").exit_code == 0
    for name in ("plan.csv", "plan.json", "plan.png", "run-sheet.txt"):
        first, second = ((folder / "plans" / number / name).read_bytes() for number in ("001", "002"))
        assert first == second


def test_a_folder_that_takes_no_plan_is_named_before_the_search(called: Called, folder: Path) -> None:
    (folder / "plans").write_text("a file")
    result = run(folder)
    assert (result.exit_code, result.stdout, called.with_) == (2, "", [])
    assert result.stderr == f"aliquot: {folder / 'plans'}: not a directory\n"


def test_a_folder_without_permission_is_named_before_the_search(
    called: Called, folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(os, "access", lambda path, mode: mode != os.W_OK)  # root may write everywhere
    result = run(folder)
    assert (result.exit_code, result.stdout, called.with_) == (2, "", [])
    assert result.stderr == f"aliquot: {folder / 'plans'}: no plan can be written into this folder\n"
