"""The command line: whole outputs of key cases, exit statuses, one JSON document, no file after an error."""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
import small

from designer import cli, templates
from designer.studyfile import FILE_NAME

ROOT = Path(__file__).parent.parent


@pytest.fixture(autouse=True)
def _cache_aside(monkeypatch: pytest.MonkeyPatch) -> None:
    """Leave the settings of the compile cache as they are for the tests that follow."""
    monkeypatch.setattr(cli, "keep_compiled", lambda: None)


def aliquot(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, *words: object
) -> tuple[int, str, str]:
    """(exit status, standard output, standard error) of a command."""
    monkeypatch.setattr(sys, "argv", ["aliquot", *map(str, words)])
    with pytest.raises(SystemExit) as end:
        cli.main()
    out, err = capsys.readouterr()
    return int(end.value.code or 0), out, err


# every figure of it follows from closed formulas (test_checkup): ln 2 / k = 6.93 min, 1 - exp(-k t), ...
SHEET = """\
Decay of A
k within 5 %
The file can be used: 1 candidate, 1 warning (below).

CANDIDATES
  first order (belief 100 %)
    A -> P
      per mole of reaction: A -1, P +1
      rate of reaction = k*[A]
         unit from the rate  middle and 90 % range    as stated
      k  1/min               0.1 (0.05 to 0.2) 1/min  0.1 1/min, give or take a factor of 2 (90 %),
                                                      at 25 degC; activation energy 80 kJ/mol
                                                      (exact)

HALF-LIFE UNDER THE WHOLE LAW (middle and 90 % range of the belief)
  at A 20 mM, temperature 25 degC, the middle of what is on offer:
    candidate    half-life of A       gone by 1 min  gone by 60 min
    first order  6.9 (3.5 to 14) min  10 %           >99 %
  at the ends of the ranges:
    first order: 6.9 (3.5 to 14) min at every mixture on offer

WHERE THE ERROR OF A TYPICAL SAMPLE COMES FROM: A by HPLC
  Under 'first order', 6 min 56 s into a run at the middle conditions (50 % left), a reading of 10
  mM has an error of 0.2 mM (1 SD). Of its variance 24 % is relative error of the reading, 15 % is
  preparation of A, 14 % is temperature of the run, 12 % is scale, 11 % is time zero, 9 % is stock
  of A, 6 % is time of sampling, 6 % is absolute error of the reading, 3 % is scatter of the rate
  and 1 % is baseline. 36 % comes afresh with each sample and shrinks with more samples; 55 % is
  shared by all samples of a run and shrinks only with more runs; 9 % is shared by all runs from one
  stock and shrinks only with another stock.

READ FROM THE FILE
  conditions.A                 10 mM to 40 mM: starting concentration, to be chosen from 0.01 mol/L
                               to 0.04 mol/L
  conditions.temperature       25 degC: temperature, fixed at 298.15 K
  readings 'A by HPLC' signal  [A]: read in mM
  readings 'A by HPLC' errors  1 % of the reading and 0.05 mM and 3 s in the time of sampling: 1 SD,
                               afresh for every sample
  run_errors.rate              0.5 %: 1 SD, one for all samples of a run: a factor on every rate
  run_errors.prepared.A        0.8 % each run and 0.6 % of the stock: 1 SD, afresh for every run and
                               one for all runs made from the stock
  run_errors.temperature       0.1 K: 1 SD, one for all samples of a run: the true temperature
  run_errors.time_zero         4 s: 1 SD, one for all samples of a run: the start of the clock
  run_errors.scale             0.7 %: 1 SD, one for all samples of a run: a factor on the signal
  run_errors.baseline          0.02 mM: 1 SD, one for all samples of a run: added to the signal
  limits.longest_run           1 h: 60 min
  limits.booked                8 h: 480 min

NOT IN THE FILE, SO TAKEN AS
  aim.probability       a law counts as settled at 0.95
  aim.chance            0.9 of studies should get there, for the hardest candidate
  aim.precision         no constant is asked for by name
  aim.weight_on_law     0.5 on telling laws apart, the rest on precision
  limits.setup_per_run  setting up a run takes no time

WARNINGS
  - the free-order alternative is left out (free_order): a law that is not on the list can go
    unnoticed

CAUTIONS
  - Runs are chosen for what they teach, not for safety.
  - Heat not assessed: heat.reaction, heat.density and heat.heat_capacity are not given.
  - Nothing run yet: every condition here is a first. Begin with the mildest.
  - Before any run, follow local rules and ask the person responsible for hazard assessment where
    you work; do not go ahead on this sheet alone.

Figure: {figure}
"""


def test_new_writes_a_study_that_passes(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    home = tmp_path / "mine"
    status, out, err = aliquot(capsys, monkeypatch, "new", home)
    assert (status, err) == (0, "")
    assert out == (
        f"Wrote {home / FILE_NAME} (template 'aliquots').\n"
        f"Put in your own numbers, then: aliquot check {home}\n"
    )
    assert (home / FILE_NAME).read_text(encoding="utf-8") == templates.text("aliquots")


def test_new_never_overwrites(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    home = small.folder(tmp_path / "mine")
    status, out, err = aliquot(capsys, monkeypatch, "new", home, "--like", "plate")
    assert (status, out) == (2, "")
    assert err == (
        f"aliquot: {home / FILE_NAME}: there is a study here already. "
        "Nothing was changed; choose another folder\n"
    )
    assert (home / FILE_NAME).read_text(encoding="utf-8") == small.TEXT


def test_new_with_an_unknown_template(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    status, out, err = aliquot(capsys, monkeypatch, "new", tmp_path / "x", "--like", "nmr")
    assert (status, out) == (2, "")
    assert err == "aliquot: there is no template 'nmr'; there are aliquots, absorbance, gas-uptake, plate\n"
    assert not (tmp_path / "x").exists()


def test_new_as_json(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    status, out, err = aliquot(capsys, monkeypatch, "new", tmp_path / "x", "--json")
    assert (status, err) == (0, "")
    assert json.loads(out) == {
        "document": "aliquot new",
        "version": 1,
        "study": str(tmp_path / "x" / FILE_NAME),
        "template": "aliquots",
    }


def test_check_prints_the_sheet_and_draws(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    home = small.folder(tmp_path / "mine")
    status, out, err = aliquot(capsys, monkeypatch, "check", home)
    assert (status, err) == (0, "")
    assert out == SHEET.format(figure=home / "figures" / "check.png")
    assert max(len(line) for line in out.splitlines()[:-1]) <= 100
    assert (home / "figures" / "check.png").read_bytes().startswith(b"\x89PNG")
    forbidden = re.findall(r"\b(safe|validated|compliant|optimal|significant|discriminate)\b", out)
    assert forbidden == []


def test_check_as_json(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    home = small.folder(tmp_path / "mine")
    status, out, err = aliquot(capsys, monkeypatch, "check", home, "--json", "--no-figure")
    assert (status, err) == (0, "")
    document = json.loads(out)
    assert (document["document"], document["version"], document["figure"]) == ("aliquot check", 1, None)
    assert not (home / "figures").exists()
    half_life = document["candidates"][0]["half_life"]["range_90"]
    assert half_life["middle"] == pytest.approx(6.931472, rel=1e-5)  # ln 2 / 0.1 min
    described = set(re.findall(r"`(\w+)`", (ROOT / "docs" / "json.md").read_text(encoding="utf-8")))
    free = set(document["middle"]) | {"A", "P"}
    assert keys_of(document) - free <= described


def keys_of(value: object) -> set[str]:
    if isinstance(value, dict):
        return set(value) | {key for inner in value.values() for key in keys_of(inner)}
    return {key for inner in value for key in keys_of(inner)} if isinstance(value, list) else set()


def test_errors_of_a_file(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    home = small.folder(tmp_path / "mine", ('rate = "k*[A]"', 'rate = "k*[B]"'), ('"1 h"', '"1 mM"'))
    file = home / FILE_NAME
    status, out, err = aliquot(capsys, monkeypatch, "check", home)
    assert (status, out) == (2, "")
    lines = err.splitlines()
    assert all(line.startswith(f"aliquot: {file}: ") for line in lines)
    assert [line.removeprefix(f"aliquot: {file}: ").split(":")[0] for line in lines] == [
        "candidates[1].rate",
        "limits.longest_run",
    ]
    assert "Traceback" not in err
    assert sorted(path.name for path in home.iterdir()) == [FILE_NAME]

    status, out, err = aliquot(capsys, monkeypatch, "check", home, "--json")
    document = json.loads(out)
    assert (status, err) == (2, "")
    assert (document["document"], document["version"], document["source"]) == ("aliquot error", 1, str(file))
    assert [problem["where"] for problem in document["problems"]] == [
        "candidates[1].rate",
        "limits.longest_run",
    ]


def test_a_command_typed_wrongly(capsys, monkeypatch) -> None:  # type: ignore[no-untyped-def]
    status, out, err = aliquot(capsys, monkeypatch, "chekc", "x")
    assert (status, out) == (2, "")
    assert "No such command 'chekc'" in err
    status, out, err = aliquot(capsys, monkeypatch, "check", "--json")
    assert (status, err) == (2, "")
    assert json.loads(out)["problems"][0]["message"] == "Missing argument 'STUDY'."


def test_a_folder_that_cannot_be_written(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    (tmp_path / "taken").write_text("a file")
    status, out, err = aliquot(capsys, monkeypatch, "new", tmp_path / "taken")
    assert (status, out, err) == (2, "", f"aliquot: {tmp_path / 'taken'}: file exists\n")


def test_cache_folder(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", "/somewhere")
    assert cli.cache_folder() == Path("/somewhere/aliquot")


def test_a_cache_that_cannot_be_written_is_no_trouble(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("not a folder")
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "XDG_CACHE_HOME": str(tmp_path / "file")}
    code = "from designer.cli import keep_compiled; keep_compiled(); print('on')"
    run = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, timeout=120, env=environment, check=True
    )
    assert (run.stdout, run.stderr) == ("on\n", "")


def test_a_seed_below_zero(capsys, monkeypatch, tmp_path) -> None:  # type: ignore[no-untyped-def]
    home = small.folder(tmp_path / "mine")
    status, out, err = aliquot(capsys, monkeypatch, "plan", home, "--seed", "-1")
    assert (status, out, err) == (2, "", "aliquot: the seed is a whole number from 0; -1 is not\n")
    assert sorted(path.name for path in home.iterdir()) == [FILE_NAME]
