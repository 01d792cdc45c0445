"""Templates: study files to start from, one for each kind of technique."""

from __future__ import annotations

from importlib.resources import files

from designer.errors import CallError

DEFAULT = "aliquots"


def names() -> tuple[str, ...]:
    """Names of the templates, the default one first."""
    folder = files("designer") / "templates"
    found = sorted(f.name.removesuffix(".toml") for f in folder.iterdir() if f.name.endswith(".toml"))
    return (DEFAULT, *[name for name in found if name != DEFAULT])


def text(name: str = DEFAULT) -> str:
    """The study file of this template, word for word.

    Raises CallError for a name that is not in ``names()``.
    """
    if name not in names():
        raise CallError(f"there is no template '{name}'; there are {', '.join(names())}")
    return (files("designer") / "templates" / f"{name}.toml").read_text(encoding="utf-8")
