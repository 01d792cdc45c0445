"""A plan on disk: the numbered folder, the CSV there and back, the JSON document, tables."""

from __future__ import annotations

import json
import math
import re
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

import handmade
import pytest
from hypothesis import given
from hypothesis import strategies as st

from designer import documents, frames, planfiles, units
from designer.errors import StudyFileError
from designer.outcomes import Estimate
from designer.records import Run, Schedule

PLAN_CSV = """\
run,sample,time (min),ester (mM),hydroxide (mM),temperature (degC)
1,1,4,20,20,25
1,2,15,20,20,25
1,3,40,20,20,25
1,4,90,20,20,25
2,1,1.5,80,120,25
2,2,5,80,120,25
2,3,12,80,120,25
2,4,30,80,120,25
3,1,1,5,200,25
3,2,2.5,5,200,25
3,3,5,5,200,25
3,4,15,5,200,25
"""


def same(first: Schedule, second: Schedule) -> bool:
    def close(a: Any, b: Any) -> bool:
        return all(math.isclose(x, y, rel_tol=1e-10) for x, y in zip(a, b, strict=True))

    return len(first.runs) == len(second.runs) and all(
        [name for name, _ in a.conditions] == [name for name, _ in b.conditions]
        and close([v for _, v in a.conditions], [v for _, v in b.conditions])
        and close(a.times, b.times)
        and (a.length is None) == (b.length is None)
        and close([a.length or 0.0], [b.length or 0.0])
        for a, b in zip(first.runs, second.runs, strict=True)
    )


def read(text: str, folder: Path, study=None) -> Schedule:
    file = folder / "other.csv"
    file.write_text(text, encoding="utf-8")
    return planfiles.read_schedule(file, study or handmade.study())


def problems(text: str, folder: Path, study=None) -> list[str]:
    with pytest.raises(StudyFileError) as caught:
        read(text, folder, study)
    return [str(problem) for problem in caught.value.problems]


# the CSV


def test_the_csv_is_written_in_the_units_of_the_study(tmp_path: Path) -> None:
    assert planfiles.csv_text(handmade.study(), handmade.schedule()) == PLAN_CSV
    back = read(PLAN_CSV, tmp_path)
    assert back.name == "other" and same(back, handmade.schedule())


def test_times_that_minutes_cannot_write_are_written_in_seconds() -> None:
    odd = Schedule((handmade.run((0.02, 0.02), (100.0, 300.0)),))
    lines = planfiles.csv_text(handmade.study(), odd).splitlines()
    assert lines[0].startswith("run,sample,time (s),") and lines[1].startswith("1,1,100,")


def test_a_recorded_run_has_one_row_at_its_end(tmp_path: Path) -> None:
    study, schedule = handmade.recorded_study(), handmade.recorded_plan().rating.schedule
    text = planfiles.csv_text(study, schedule)
    assert text.splitlines()[1:] == ["1,end,1200,10,50,25"]
    assert same(read(text, tmp_path, study), schedule)


amounts = st.floats(1e-6, 1e3)


@given(
    st.lists(
        st.tuples(amounts, amounts, st.lists(st.floats(0, 1e7), min_size=1, max_size=6)),
        min_size=1,
        max_size=4,
    )
)
def test_any_schedule_comes_back_as_it_went(runs: list[tuple[float, float, list[float]]]) -> None:
    import tempfile

    schedule = Schedule(tuple(handmade.run((a, b), tuple(sorted(times))) for a, b, times in runs))
    with tempfile.TemporaryDirectory() as folder:
        assert same(read(planfiles.csv_text(handmade.study(), schedule), Path(folder)), schedule)


def test_columns_may_come_in_any_order_and_unit_and_a_fixed_one_may_be_left_out(tmp_path: Path) -> None:
    text = "sample;run;hydroxide (M);time (h);ester (umol/L)\n2;1;0,2;0,5;10000\n1;1;0,2;0,1;10000\n"
    expected = Schedule((handmade.run((0.010, 0.200), (360.0, 1800.0)),))
    assert same(read(text, tmp_path), expected)
    with_mark = "﻿" + text.replace("\n", "\r\n").replace(";", "\t")
    assert same(read(with_mark, tmp_path), expected)


def test_a_schedule_that_breaks_limits_is_read_all_the_same(tmp_path: Path) -> None:
    text = "run,sample,time (d),ester (M),hydroxide (M)\n1,1,9,5,0\n"
    assert same(read(text, tmp_path), Schedule((handmade.run((5.0, 0.0), (9 * 86400.0,)),)))


def test_every_problem_of_the_rows_is_reported_with_line_and_column(tmp_path: Path) -> None:
    text = (
        "run,sample,time (h),ester (M),hydroxide (mM)\n"
        "1,1,0.5,0.1,200\n"
        "1,2,-1,0.2,nan\n"
        "x,3,1,2,3\n"
        "\n"
        "1,4,1,0.2,200\n"
        "1,5,1,0.1,200,7\n"
        "2,end,1,0.1,200\n"
    )
    assert problems(text, tmp_path) == [
        "line 3, column time (h): below zero; expected zero or more, found '-1'",
        "line 3, column hydroxide (mM): not understood; expected a number without its unit, found 'nan'",
        "line 4, column run: not understood; expected a whole number from 1, found 'x'",
        "line 6, column ester (M): run 1 starts from two values of ester; "
        "expected 0.1 M as in line 2, found 0.2 M. Give a run of its own to each mixture",
        "line 7: more cells than columns; expected 5, found 6",
        "run 2: a row 'end', but nothing is recorded continuously. Leave it out",
    ]


@pytest.mark.parametrize(
    ("head", "expected"),
    [
        (
            "run,sample,time (min),ester (mM),hydroxid (mM)",
            "column 5: 'hydroxid (mM)' is no column of a plan. Perhaps 'hydroxide' is meant",
        ),
        (
            "run,sample,time (min),ester (mM)",
            "there is no column 'hydroxide'. Start from the plan.csv of a plan of this study",
        ),
        (
            "run,sample,time (mM),ester (mM),hydroxide (mM)",
            "column 3: the unit of 'time' is of the wrong kind; "
            "expected a time (s), found a concentration (mol/L)",
        ),
        (
            "run,sample,time,ester (mM),hydroxide (mM)",
            "column 3: the unit of 'time' is of the wrong kind; expected a time (s), found a plain number. "
            "Write 'time (unit)' in the first row",
        ),
        (
            "run,sample,time (mins),ester (mM),hydroxide (mM)",
            "column 3: the unit of 'time': there is no unit 'mins'; perhaps 'min'; expected a time (s)",
        ),
        (
            "run,sample,time (min),ester (mM),hydroxide (mM),ester (M)",
            "column 6: 'ester' stands in two columns. Leave one",
        ),
    ],
)
def test_a_wrong_head_is_named_with_its_column(head: str, expected: str, tmp_path: Path) -> None:
    row = ",".join("1" for _ in head.split(","))
    assert problems(f"{head}\n{row}\n", tmp_path) == [expected]


def test_files_that_are_no_plan_at_all(tmp_path: Path) -> None:
    assert problems("", tmp_path)[0].startswith("an empty file; expected a row of column names")
    head = PLAN_CSV.splitlines()[0]
    assert problems(head, tmp_path) == [
        "column names but no row of a sample. Start from the plan.csv of a plan of this study"
    ]
    assert problems(f'{head}\n1,"1,2\n', tmp_path)[0].startswith("not written as CSV")
    with pytest.raises(StudyFileError, match="there is no such file"):
        planfiles.read_schedule(tmp_path / "none.csv", handmade.study())
    (tmp_path / "latin.csv").write_bytes(head.encode() + b"\n1,1,\xe9,2,3,4\n")
    with pytest.raises(StudyFileError, match="line 2: not written in UTF-8"):
        planfiles.read_schedule(tmp_path / "latin.csv", handmade.study())
    (tmp_path / "large.csv").write_bytes(b"1," * 1_000_000)
    with pytest.raises(StudyFileError, match=r"too large for a plan; expected at most 1 MB, found 2\.0 MB"):
        planfiles.read_schedule(tmp_path / "large.csv", handmade.study())


def test_recorded_runs_need_their_end_and_only_that(tmp_path: Path) -> None:
    head = "run,sample,time (min),dye (uM),hydroxide (mM)\n"
    study = handmade.recorded_study()
    assert problems(f"{head}1,1,5,10,50\n2,end,20,10,50\n2,end,15,10,50\n", tmp_path, study) == [
        "line 4: run 2 ends twice. Leave one row 'end'",
        "run 1: no length. Its signal is recorded: add a row with sample 'end'",
        "run 1: samples, but the study reads only recorded signals. Leave only its row 'end'",
    ]
    both = replace(study, readings=(*study.readings, replace(study.readings[0], name="by hand", every=None)))
    assert problems(f"{head}1,1,30,10,50\n1,end,20,10,50\n", tmp_path, both) == [
        "run 1: a sample after its end. Put the row 'end' at the last sample or later"
    ]


# the folder


def write(folder: Path) -> Path:
    return planfiles.write(folder, handmade.study(), handmade.plan(), "the sheet\n", b"a picture")


def test_plans_are_numbered_and_never_overwritten(tmp_path: Path) -> None:
    first, second = write(tmp_path), write(tmp_path)
    assert [first.name, second.name] == ["001", "002"]
    assert sorted(path.name for path in first.iterdir()) == [
        "plan.csv",
        "plan.json",
        "plan.png",
        "run-sheet.txt",
    ]
    assert all((first / name.name).read_bytes() == name.read_bytes() for name in second.iterdir())
    (tmp_path / "plans" / "041").mkdir()
    (tmp_path / "plans" / "notes").mkdir()
    assert write(tmp_path).name == "042"
    assert list((tmp_path / "plans" / "041").iterdir()) == []
    assert sorted(path.name for path in (tmp_path / "plans").iterdir()) == [
        "001",
        "002",
        "041",
        "042",
        "notes",
    ]


def test_writers_at_the_same_time_get_numbers_of_their_own(tmp_path: Path) -> None:
    with ThreadPoolExecutor(8) as pool:
        written = list(pool.map(lambda _: write(tmp_path), range(16)))
    assert sorted(path.name for path in written) == [f"{number:03d}" for number in range(1, 17)]
    assert all(len(list(path.iterdir())) == 4 for path in written)


def test_a_plan_that_cannot_be_written_whole_leaves_nothing(tmp_path: Path) -> None:
    broken = replace(handmade.plan(), title=object())  # no JSON
    with pytest.raises(TypeError):
        planfiles.write(tmp_path, handmade.study(), broken, "", b"")
    with pytest.raises(TypeError):
        planfiles.write(tmp_path, handmade.study(), handmade.plan(), "", None)  # type: ignore[arg-type]
    assert list(tmp_path.rglob("*")) in ([], [tmp_path / "plans"])


# the document


def keys(value: Any) -> set[str]:
    """Every key of a document, the user's own names of conditions left out."""
    if isinstance(value, list):
        return {key for inner in value for key in keys(inner)}
    if not isinstance(value, dict):
        return set()
    inner = [keys(list(part.values()) if key == "conditions" else part) for key, part in value.items()]
    return set(value).union(*inner)


def full_document() -> dict[str, Any]:
    """A document in which no list is empty."""
    from designer.outcomes import Inseparable, LocalRating

    plan = replace(
        handmade.recorded_plan(),
        local=(LocalRating("first order in both", "D", 1.0, 0.1),),
        inseparable=(Inseparable("a", "b", ("temperature",)),),
        warnings=("odd",),
        alternatives=(handmade.recorded_plan().rating,),
        rating=replace(handmade.recorded_plan().rating, unsolved=(("reversible", 2),)),
        curves=(replace(handmade.plan().curves[0], reading="absorbance"),),
    )
    return documents.plan_document(handmade.recorded_study(), plan)


def test_every_key_of_the_document_is_described() -> None:
    text = (Path(__file__).parent.parent / "docs" / "json.md").read_text(encoding="utf-8")
    section = text[text.index("## `aliquot plan`") + 2 :].split("\n## ")[0]
    described = set(re.findall(r"^ *- `(\w+)`: ", section, re.MULTILINE))
    common = {"document", "version"}  # described once for every document
    assert keys(full_document()) | {"folder"} == described | common


def test_the_document_is_plain_json_and_carries_units(tmp_path: Path) -> None:
    document = json.loads((write(tmp_path) / "plan.json").read_text(encoding="utf-8"))
    assert (document["document"], document["version"]) == ("aliquot plan", 1)
    assert document == documents.plan_document(handmade.study(), handmade.plan())
    assert document["time_unit"] == "min" and document["booked"] == 960.0
    first = document["runs"][0]
    assert first["conditions"] == {
        "ester": {"value": 20.0, "unit": "mM"},
        "hydroxide": {"value": 20.0, "unit": "mM"},
        "temperature": {"value": 25.0, "unit": "degC"},
    }
    assert [sample["time"] for sample in first["samples"]] == [4.0, 15.0, 40.0, 90.0]
    predicted = first["samples"][1]["predicted"][0]
    # equal starting amounts, second order: 20/(1 + k*20 mM*t) mM
    assert predicted["mean"] == pytest.approx(20 / (1 + handmade.K2 * 0.02 * 900), rel=1e-7)
    assert predicted["fraction_left"] == pytest.approx(predicted["mean"] / 20, rel=1e-7)
    assert document["rating"]["total_time"] == 270.0


def test_what_is_not_defined_is_null() -> None:
    nothing = Estimate(math.nan, math.nan)
    plan = replace(handmade.plan(), rating=replace(handmade.plan().rating, information_share=nothing))
    document = documents.plan_document(handmade.study(), plan)
    assert document["rating"]["information_share"] == {"value": None, "error": None}
    json.dumps(document, allow_nan=False)


# tables for a notebook


def test_samples_as_a_table_have_units_in_the_names_of_columns() -> None:
    table = frames.samples(handmade.study(), handmade.plan())
    assert len(table) == 12 * 4  # samples times candidates
    assert list(table.columns[:6]) == [
        "run",
        "sample",
        "time (min)",
        "ester (mM)",
        "hydroxide (mM)",
        "temperature (degC)",
    ]
    row = table[(table.run == 1) & (table["sample"] == 2) & (table.candidate == "hydroxide plays no part")]
    # first order: 20*exp(-k t) mM
    assert row["predicted"].item() == pytest.approx(20 * math.exp(-handmade.K1 * 900), rel=1e-6)
    assert row["unit"].item() == "mM" and row["time (min)"].item() == 15.0


def test_ratings_as_a_table_hold_every_figure_beside_its_error() -> None:
    table = frames.ratings(handmade.study(), handmade.plan()).set_index("plan")
    assert list(table.index) == ["this plan", "one level, equal steps", "three flooded repeats"]
    assert table.loc["three flooded repeats", "mean probability"] == 0.55
    assert table.loc["three flooded repeats", "mean probability, error"] == 0.005
    assert table.loc["this plan", "total time (min)"] == pytest.approx(270.0)
    assert table.loc["this plan", "half-width of k"] == 0.041


def test_a_plain_condition_carries_no_unit(tmp_path: Path) -> None:
    from designer.records import Condition

    study = handmade.study()
    stirring = replace(
        study, conditions=(*study.conditions, Condition("stirring", False, units.NONE, "", 1, 3))
    )
    schedule = Schedule((Run((*handmade.run((0.02, 0.02), ()).conditions, ("stirring", 2.0)), (60.0,)),))
    text = planfiles.csv_text(stirring, schedule)
    assert text.splitlines() == [
        "run,sample,time (min),ester (mM),hydroxide (mM),temperature (degC),stirring",
        "1,1,1,20,20,25,2",
    ]
    assert same(read(text, tmp_path, stirring), schedule)
