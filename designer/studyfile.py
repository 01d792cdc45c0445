"""Read a study file into a raw record: every value with its key path, every misfit noted.

Only types and spelling of keys are judged here; the chemistry is judged by ``checking``.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from designer.errors import Problem, StudyFileError

LARGEST = 1_000_000  # bytes; a study file is a page or two
FILE_NAME = "study.toml"


@dataclass(frozen=True)
class Entry:
    """A value of the file and its key path (``candidates[2].k``; lists count from 1)."""

    where: str
    value: Any

    def get(self, key: str) -> Entry | None:
        """The entry under ``key`` of a table; None where there is none."""
        found = self.value.get(key) if isinstance(self.value, dict) else None
        return None if found is None else Entry(f"{self.where}.{key}" if self.where else key, found)

    def items(self) -> Iterator[tuple[str, Entry]]:
        """(key, entry) of a table, in the order of the file."""
        for key in self.value if isinstance(self.value, dict) else ():
            entry = self.get(key)
            if entry is not None:
                yield key, entry

    def each(self) -> Iterator[Entry]:
        """Entries of a list; an item that was no use has the value None."""
        for number, value in enumerate(self.value, 1):
            yield Entry(f"{self.where}[{number}]", value)


@dataclass(frozen=True)
class Raw:
    """A study file as read: root of its entries, its text, the problems of type and spelling.

    dropped: key paths of values that were no use and are left out of ``root``.
    """

    root: Entry
    text: str
    name: str
    problems: tuple[Problem, ...] = ()
    dropped: frozenset[str] = frozenset()


def locate(path: Path) -> Path:
    """The study file itself: ``path`` or the ``study.toml`` in the folder ``path``.

    Raises StudyFileError where there is none.
    """
    file = path / FILE_NAME if path.is_dir() else path
    if file.is_file():
        return file
    what = f"there is no {FILE_NAME} in this folder" if path.is_dir() else "there is no such file or folder"
    advice = "Give the folder of the study, or start one from a template"
    raise StudyFileError([Problem("", what, advice=advice)], str(path))


def read(path: str | Path) -> Raw:
    """Read the study in the folder or file ``path``.

    Raises StudyFileError for a file that is missing, over 1 MB, not UTF-8 or not TOML; every other
    problem is carried in ``Raw.problems`` and joined by ``checking`` to what it finds itself.
    """
    file = locate(Path(path))
    size = file.stat().st_size
    if size > LARGEST:
        found, expected = f"{size / 1e6:.1f} MB", f"at most {LARGEST / 1e6:.0f} MB"
        advice = "Readings belong in a file of their own, not in the study file"
        raise StudyFileError([Problem("", "too large to be read", found, expected, advice)], str(file))
    try:
        text = file.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as reason:
        line = file.read_bytes()[: reason.start].count(b"\n") + 1
        advice = "Save the file as UTF-8"
        raise StudyFileError(
            [Problem(f"line {line}", "not written in UTF-8", advice=advice)], str(file)
        ) from None
    return parse(text, str(file))


def parse(text: str, name: str = FILE_NAME) -> Raw:
    """The raw record of a study file's text.

    Raises StudyFileError, with the line, for what is not TOML.
    """
    try:
        table = tomllib.loads(text.replace("\r\n", "\n"))
    except tomllib.TOMLDecodeError as reason:
        raise StudyFileError([_syntax(reason, text)], name) from None
    except RecursionError:
        raise StudyFileError(
            [Problem("", "brackets nest too deeply", advice="Flatten the tables")], name
        ) from None
    except ValueError:  # the one kind that is no TOMLDecodeError: digits beyond what Python converts
        advice = "Shorten the longest number"
        raise StudyFileError([Problem("", "a number of thousands of digits", advice=advice)], name) from None
    problems, dropped = _misfits(table)
    return Raw(Entry("", table), text, name, tuple(problems), frozenset(dropped))


def _syntax(reason: tomllib.TOMLDecodeError, text: str) -> Problem:
    message = str(reason)
    what, _, place = message.partition(" (at ")
    where = place.rstrip(")").removesuffix("end of document").strip()
    if not where:
        where = f"line {text.count(chr(10)) + 1}"
    what = "a key is given twice" if what == "Cannot overwrite a value" else what
    advice = "Mend this line first; the rest of the file cannot be read before"
    return Problem(where, f"not written as TOML: {what[:1].lower()}{what[1:]}", advice=advice)


def _misfits(table: dict[str, Any]) -> tuple[list[Problem], list[str]]:
    """Problems of spelling and type; their values are taken out of ``table``."""
    from pydantic import ValidationError

    from designer.schema import StudyTable

    try:
        StudyTable.model_validate(table)
    except ValidationError as misfits:
        found = [(_keys(error["loc"]), error) for error in misfits.errors(include_url=False)]
        problems = [_misfit(table, keys, error) for keys, error in found]
        for keys, _ in sorted(found, key=lambda pair: [str(key) for key in pair[0]], reverse=True):
            _remove(table, keys)
        return problems, [_path(keys) for keys, _ in found]
    return [], []


def _keys(location: tuple[int | str, ...]) -> tuple[int | str, ...]:
    return tuple(key for key in location if not str(key).startswith("<"))


def _path(keys: tuple[int | str, ...]) -> str:
    text = ""
    for key in keys:
        text += f"[{key + 1}]" if isinstance(key, int) else f".{key}" if text else str(key)
    return text


def _misfit(table: dict[str, Any], keys: tuple[int | str, ...], error: Any) -> Problem:
    if error["type"] == "extra_forbidden":
        return _unknown_key(keys)
    found = table
    for key in keys:
        found = found[key]  # type: ignore[index]
    kinds = {
        "list_type": "a list",
        "dict_type": "a table",
        "model_type": "a table",
        "model_attributes_type": "a table",
    }
    expected = kinds.get(error["type"], error["msg"])
    advice = _brackets_advice(keys, error["type"], found)
    return Problem(_path(keys), "the wrong kind of value", _shown(found), expected, advice)


def _brackets_advice(keys: tuple[int | str, ...], kind: str, found: Any) -> str:
    if len(keys) == 1 and kind == "list_type" and isinstance(found, dict):
        return f"Write [[{keys[0]}]] with two pairs of brackets"
    if len(keys) == 1 and isinstance(found, list):
        return f"Write [{keys[0]}] with one pair of brackets, once"
    return ""


def _shown(value: Any) -> str:
    if isinstance(value, dict | list):
        return "a table" if isinstance(value, dict) else "a list"
    return f'"{value}"'[:60] if isinstance(value, str) else str(value).lower()[:60]


def _unknown_key(keys: tuple[int | str, ...]) -> Problem:
    from designer.schema import NOT_YET

    key = str(keys[-1])
    not_yet = NOT_YET.get((str(keys[0]), key))
    if not_yet:
        return Problem(_path(keys), f"'{key}' is not available yet", advice=f"Leave it out: {not_yet}")
    allowed = allowed_keys(keys[:-1])
    near = get_close_matches(key, allowed, n=1, cutoff=0.6)
    advice = f"Perhaps '{near[0]}' is meant" if near else f"Known here: {', '.join(allowed)}"
    return Problem(_path(keys), f"'{key}' is no key of this table", advice=advice)


def allowed_keys(keys: tuple[int | str, ...]) -> list[str]:
    """Keys that the table at this path may hold, from the schema."""
    from designer import schema

    tables: dict[tuple[str, ...], type[schema.Table]] = {
        (): schema.StudyTable,
        ("reactions",): schema.ReactionTable,
        ("candidates",): schema.CandidateTable,
        ("readings",): schema.ReadingTable,
        ("run_errors",): schema.RunErrorsTable,
        ("plan",): schema.PlanTable,
        ("limits",): schema.LimitsTable,
        ("aim",): schema.AimTable,
        ("pilots",): schema.PilotTable,
        ("vessel",): schema.VesselTable,
        ("heat",): schema.HeatTable,
        ("costs",): schema.CostsTable,
        ("stop",): schema.StopTable,
    }
    words = tuple(str(key) for key in keys if not isinstance(key, int))
    if words[:1] == ("candidates",) and len(words) == 2:
        table: type[schema.Table] = schema.ConstantTable
    elif words[:1] == ("candidates",) and len(words) == 3:
        table = schema.EnergyTable
    elif words[:1] == ("conditions",) and len(words) == 2:
        table = schema.ConditionTable
    elif words[:2] == ("run_errors", "prepared"):
        table = schema.PreparedTable
    else:
        table = tables[words]
    return [field.alias or name for name, field in table.model_fields.items()]


def _remove(table: Any, keys: tuple[Any, ...]) -> None:
    """Take out one value; an item of a list becomes None so that the others keep their numbers."""
    *path, last = keys
    for key in path:
        table = table[key] if isinstance(table, list) or key in table else {}
        if table is None:
            return
    if isinstance(table, list):
        table[last] = None
    else:
        table.pop(last, None)
