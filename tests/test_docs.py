"""The pages tell the truth: commands that can be pasted, links that resolve, every option and module named,
no claim that this program does not make."""

from __future__ import annotations

import ast
import re
import tomllib
from pathlib import Path

import pytest
import typer

from designer import templates
from designer.cli import app

ROOT = Path(__file__).parent.parent
PAGES = sorted([ROOT / "README.md", ROOT / "DEVELOPERS.md", *(ROOT / "docs").glob("*.md")])
README = (ROOT / "README.md").read_text(encoding="utf-8")
PACKAGE = sorted((ROOT / "designer").rglob("*.py"))
WRITTEN_FOR_USERS = sorted(
    [*(ROOT / "designer" / "templates").glob("*.toml"), *ROOT.glob("studies/*/*.toml")]
)

LEFT_OUT = "[Runs 2 and 3 are printed in the same way.]"

CLAIMS = re.compile(
    r"\b(safe|safely|validated|compliant|compliance|optimal|optimally|significant|significantly)\b", re.I
)
NO_CLAIM = re.compile(r"significant (digits?|figures?)|Optimal Design of Experiments", re.I)


def blocks(text: str, language: str = "sh") -> list[str]:
    return [found.strip() for found in re.findall(rf"^```{language}\n(.*?)^```$", text, re.M | re.S)]


def claims(text: str) -> list[str]:
    """Words a page or a message must not use of a plan."""
    return CLAIMS.findall(NO_CLAIM.sub("", text))


def name(page: Path) -> str:
    return page.relative_to(ROOT).as_posix()


def test_first_block_runs_the_main_job_in_one_line() -> None:
    first = blocks(README)[0]
    assert first == (
        "python3 -m venv .venv && .venv/bin/pip install . && .venv/bin/aliquot new my-study "
        "&& .venv/bin/aliquot plan my-study"
    )


def test_second_block_runs_the_tests_in_one_line() -> None:
    assert (
        blocks(README)[1] == "python3 -m venv .venv && .venv/bin/pip install -e '.[dev]' && .venv/bin/pytest"
    )


def test_the_job_stands_in_one_paragraph_at_the_top() -> None:
    title, paragraph, *_ = README.split("\n\n")
    assert title == "# aliquot"
    assert 30 < len(paragraph.split()) < 150
    assert "```" not in paragraph


def test_the_example_is_cut_from_the_whole_sheet() -> None:
    """What the README shows of the run sheet stands in docs/ester-run-sheet.txt, line by line, in order."""
    (shown,) = blocks(README, "text")
    whole = iter((ROOT / "docs" / "ester-run-sheet.txt").read_text(encoding="utf-8").splitlines())
    for line in shown.splitlines():
        assert line == LEFT_OUT or any(line == other for other in whole), line


def test_the_example_is_the_study_in_the_folder() -> None:
    (shown,) = blocks(README, "toml")
    study = (ROOT / "studies" / "ester" / "study.toml").read_text(encoding="utf-8")
    assert all(part in study for part in shown.split("\n\n"))


def anchors(page: Path) -> set[str]:
    """Names under which headings can be linked to: lower case, spaces to hyphens, marks dropped."""
    heads = re.findall(r"^#+ (.+)$", page.read_text(encoding="utf-8"), re.M)
    return {re.sub(r"[^\w\- ]", "", head.lower()).replace(" ", "-") for head in heads}


@pytest.mark.parametrize("page", PAGES, ids=name)
def test_links_resolve(page: Path) -> None:
    text = re.sub(r"```.*?```|^    .*$", "", page.read_text(encoding="utf-8"), flags=re.S | re.M)
    for target in re.findall(r"\]\(([^)\s]+)\)", text):
        if target.startswith(("http:", "https:")):
            continue
        path, _, anchor = target.partition("#")
        file = page.parent / path if path else page
        assert file.exists(), target
        assert not anchor or anchor in anchors(file), target


def options() -> list[tuple[str, str]]:
    """(command, name) of every argument and option of the command line."""
    commands = typer.main.get_command(app).commands  # type: ignore[attr-defined]
    found = []
    for command, body in commands.items():
        for part in body.params:
            is_option = part.param_type_name == "option"
            found += [
                (command, word)
                for word in ([*part.opts, *part.secondary_opts] if is_option else [part.metavar])
            ]
    return [pair for pair in found if pair[1] not in ("-h", "--help")]


@pytest.mark.parametrize(("command", "word"), options())
def test_every_option_is_documented(command: str, word: str) -> None:
    section = README.partition(f"### `aliquot {command}")[2].partition("\n#")[0]
    assert re.search(rf"(?<![\w-]){re.escape(word)}(?![\w-])", section), f"{word} of {command}"


def test_options_of_the_readme_exist() -> None:
    known = {word for _, word in options()} | {"--help"}
    assert set(re.findall(r"(?<=`)--[a-z-]+", README)) <= known


def test_every_template_is_named() -> None:
    assert all(f"`{template}`" in README for template in templates.names())


@pytest.mark.parametrize("page", [*PAGES, *WRITTEN_FOR_USERS], ids=name)
def test_pages_claim_nothing(page: Path) -> None:
    assert not claims(page.read_text(encoding="utf-8"))


def messages(module: Path) -> list[str]:
    """Every text of a module but its docstrings."""
    tree = ast.parse(module.read_text(encoding="utf-8"))
    bodies = [
        node for node in ast.walk(tree) if isinstance(node, ast.Module | ast.ClassDef | ast.FunctionDef)
    ]
    docstrings = {id(node.body[0].value) for node in bodies if isinstance(node.body[0], ast.Expr)}
    texts = [node for node in ast.walk(tree) if isinstance(node, ast.Constant) and id(node) not in docstrings]
    return [node.value for node in texts if isinstance(node.value, str)]


@pytest.mark.parametrize("module", PACKAGE, ids=name)
def test_messages_claim_nothing(module: Path) -> None:
    found = [text for text in messages(module) if claims(text)]
    assert not found


def test_control_a_claim_is_found() -> None:
    assert claims("This plan is Optimal, and safe to run; the difference is significant.") == [
        "Optimal",
        "safe",
        "significant",
    ]
    assert not claims("Two significant figures. Runs are chosen for what they teach, not for safety.")


def test_floor_plan_names_every_module_once() -> None:
    page = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    floors = page.partition("## Floor plan")[2].partition("\n## ")[0]
    listed = re.findall(r"^\| `([\w.]+)` \|", floors, re.M)
    modules = [path.relative_to(ROOT / "designer").with_suffix("").as_posix() for path in PACKAGE]
    modules = [module.removesuffix("/__init__").replace("/", ".") for module in modules]
    assert sorted(listed) == sorted(module for module in modules if module != "__init__")


def test_every_dependency_has_a_floor_and_a_cap() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = [*project["dependencies"], *project["optional-dependencies"]["dev"]]
    assert all(re.fullmatch(r"[a-z]+>=[\d.]+,<[\d.]+", one) for one in wanted)
