"""Reading of study files: syntax, spelling, types, size; templates; the reference page."""

from __future__ import annotations

from pathlib import Path

import pytest

from designer import checking, schema, schema_reference, studyfile, templates
from designer.errors import CallError, StudyFileError
from designer.loading import load_study

ROOT = Path(__file__).parent.parent
STUDIES = sorted(path.parent.name for path in (ROOT / "studies").glob("*/study.toml"))


def messages(text: str) -> list[str]:
    """Problems of type and spelling."""
    return [str(problem) for problem in studyfile.parse(text).problems]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("a = = 3", "study.toml: line 1, column 5: not written as TOML: invalid value."),
        (
            "a = 3\n[x",
            "study.toml: line 2: not written as TOML: expected ']' at the end of a table declaration.",
        ),
        ("a = 3\na = 4", "study.toml: line 2: not written as TOML: a key is given twice."),
        ("a = 3\n\nb c = 2", "study.toml: line 3, column 3: not written as TOML: expected '=' after a key"),
        ('t = "a\n', "study.toml: line 1, column 7: not written as TOML: illegal character"),
        ("a = " + "9" * 5000, "study.toml: a number of thousands of digits."),
        ("a = " + "[" * 100_000, "study.toml: brackets nest too deeply."),
    ],
)
def test_what_is_no_toml_is_named_with_its_line(text: str, message: str) -> None:
    with pytest.raises(StudyFileError) as caught:
        studyfile.parse(text)
    assert str(caught.value).startswith(message)
    assert len(caught.value.problems) == 1


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ('titel = "x"', "titel: 'titel' is no key of this table. Perhaps 'title' is meant"),
        (
            "[limits]\nspacin = 3",
            "limits.spacin: 'spacin' is no key of this table. Perhaps 'spacing' is meant",
        ),
        (
            "[costs]\nzzz = 3",
            "costs.zzz: 'zzz' is no key of this table. Known here: run, sample",
        ),
        (
            "[[candidates]]\n[[candidates]]\nk = { value = 1, giv_or_take = 3 }",
            "candidates[2].k.giv_or_take: 'giv_or_take' is no key of this table. "
            "Perhaps 'give_or_take' is meant",
        ),
        (
            "[[candidates]]\nk = { activation_energy = { valu = 3 } }",
            "candidates[1].k.activation_energy.valu: 'valu' is no key of this table. "
            "Perhaps 'value' is meant",
        ),
        (
            '[conditions]\nester = { fro = "1 mM" }',
            "conditions.ester.fro: 'fro' is no key of this table. Perhaps 'from' is meant",
        ),
        (
            "[run_errors.prepared]\nester = { stok = 3 }",
            "run_errors.prepared.ester.stok: 'stok' is no key of this table. Perhaps 'stock' is meant",
        ),
        (
            "[[readings]]\nof_runs = [1]",
            "readings[1].of_runs: 'of_runs' is not available yet. "
            "Leave it out: every reading is taken in every run",
        ),
        (
            "[plan]\nruns = 0",
            "plan.runs: the wrong kind of value; expected a whole number from 1 to 10000, found 0",
        ),
        (
            "[plan]\nruns = 2.5",
            "plan.runs: the wrong kind of value; expected a whole number from 1 to 10000, found 2.5",
        ),
        (
            "[aim]\nchance = nan",
            "aim.chance: the wrong kind of value; expected a number that is finite, found nan",
        ),
        (
            "[conditions]\nester = inf",
            "conditions.ester: the wrong kind of value; expected a number or a text with a unit such as "
            '"5 mM" '
            "that is finite, found inf",
        ),
        (
            "[conditions]\nester = true",
            "conditions.ester: the wrong kind of value; expected a number or a text with a unit such as "
            '"5 mM", '
            "found true",
        ),
        ("title = 3", "title: the wrong kind of value; expected a text in quotes, found 3"),
        (
            "[readings]\nsignal = 3",
            "readings: the wrong kind of value; expected a list, found a table. "
            "Write [[readings]] with two pairs of brackets",
        ),
        (
            "[[limits]]\nruns = 3",
            "limits: the wrong kind of value; expected a table, found a list. "
            "Write [limits] with one pair of brackets, once",
        ),
        ("free_order = true", "free_order: the wrong kind of value; expected a number or false, found true"),
        ("title = 1979-05-27", "title: the wrong kind of value; expected a text in quotes, found 1979-05-27"),
    ],
)
def test_misfits(text: str, message: str) -> None:
    assert messages(text) == [message]


def test_every_misfit_is_found_at_once() -> None:
    text = 'titel = "x"\n[plan]\nruns = 0\n[limts]\n[[candidates]]\nname = 3\n[[candidates]]\nk = [1]\n'
    assert sorted(studyfile.parse(text).dropped) == [
        "candidates[1].name",
        "candidates[2].k",
        "limts",
        "plan.runs",
        "titel",
    ]


def test_values_carry_their_key_path() -> None:
    raw = studyfile.parse('[[candidates]]\nname = "a"\n[[candidates]]\nk = { at = { ester = "5 mM" } }\n')
    second = list(raw.root.get("candidates").each())[1]
    entry = second.get("k").get("at").get("ester")
    assert (entry.where, entry.value) == ("candidates[2].k.at.ester", "5 mM")


def test_folder_or_file(tmp_path: Path) -> None:
    text = '\ufefftitle = "with a mark at the start"\r\nquestion = "and other line ends"\r\n'
    (tmp_path / "study.toml").write_bytes(text.encode())
    for path in (tmp_path, tmp_path / "study.toml"):
        raw = studyfile.read(path)
        assert raw.root.get("title").value == "with a mark at the start"
        assert raw.name.endswith("study.toml")
        assert raw.problems == ()


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"#" * 10_000_000, "too large to be read; expected at most 1 MB, found 10.0 MB."),
        (b'title = "a"\nquestion = "\xff"', "line 2: not written in UTF-8. Save the file as UTF-8"),
    ],
)
def test_files_that_cannot_be_read(tmp_path: Path, content: bytes, message: str) -> None:
    (tmp_path / "study.toml").write_bytes(content)
    with pytest.raises(StudyFileError) as caught:
        studyfile.read(tmp_path)
    assert str(caught.value).startswith(f"{tmp_path / 'study.toml'}: {message}")


def test_no_file(tmp_path: Path) -> None:
    with pytest.raises(StudyFileError, match=r"there is no study\.toml in this folder"):
        studyfile.read(tmp_path)
    with pytest.raises(StudyFileError, match="there is no such file or folder"):
        studyfile.read(tmp_path / "nowhere")


@pytest.mark.parametrize("name", templates.names())
def test_templates_load_and_say_what_is_typical(name: str) -> None:
    text = templates.text(name)
    study = checking.build(studyfile.parse(text))
    assert len(study.listed) >= 3
    assert "typical, replace with your own" in text
    assert all(f"\n#   {number}. " in text for number in range(1, 7))  # the six questions
    assert study.source == text


def test_template_names() -> None:
    assert templates.names() == ("aliquots", "absorbance", "gas-uptake", "plate")
    with pytest.raises(CallError, match="there is no template 'nmr'; there are aliquots, "):
        templates.text("nmr")


@pytest.mark.parametrize("name", STUDIES)
def test_studies_load(name: str) -> None:
    study = load_study(ROOT / "studies" / name)
    assert sum(candidate.belief for candidate in study.candidates) == pytest.approx(1)


def test_there_are_studies() -> None:
    assert {"dye", "ester", "hydrogenation", "lactone"} <= set(STUDIES)


def test_the_reference_page_is_written_from_the_schema() -> None:
    page = (ROOT / "docs" / "study-file.md").read_text(encoding="utf-8")
    assert page == schema_reference.text()


def test_every_key_is_described() -> None:
    tables = [
        value
        for value in vars(schema).values()
        if isinstance(value, type) and issubclass(value, schema.Table)
    ]
    assert len(tables) > 15
    for table in tables:
        for key, field in table.model_fields.items():
            assert field.description, f"{table.__name__}.{key}"
            assert f"| `{field.alias or key}` |" in schema_reference.text()
