"""Beliefs as a chemist states them, made into distributions.

value + give_or_take f     log-normal, median = value, 90 % between value/f and value*f
value + within w           normal, 90 % between value-w and value+w, cut at 0 where that lies above 0
low + high                 5 and 95 % points: log-normal; for an order (a constant that stands in an exponent)
                           normal, cut at 0; for a fraction (``fraction = true``) logit-normal
uniform = [a, b]           every value between a and b equally likely
half_life + give_or_take   log-normal in the constant, by way of the half-life of the whole law
value alone                known exactly
Activation energies are normal.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from math import exp, isfinite, log

from designer import halflife, plainlaw, units
from designer.noting import Notes, near
from designer.records import Z90, Belief, Condition, Constant, Dimension, Pilot, Step
from designer.studyfile import Entry

FORMS = (
    {"value"},
    {"value", "give_or_take"},
    {"value", "within"},
    {"low", "high"},
    {"uniform"},
    {"half_life"},
    {"half_life", "give_or_take"},
)
BELIEF_KEYS = frozenset().union(*FORMS)
WAYS = (
    "value with give_or_take or within, or low and high, or uniform, "
    "or half_life with give_or_take, or value alone"
)
PILOT_ERROR = 0.03  # absolute, one standard deviation, where the file gives none
_OBSERVATION = re.compile(r"\s*(?P<share>[\d.]+\s*%)\s+conversion\s+(?:after|at|in)\s+(?P<time>.+)")


@dataclass(frozen=True)
class Scene:
    """What a constant's statement may refer to."""

    conditions: tuple[Condition, ...]
    known: dict[str, float]  # study constants
    time_unit: str = "min"

    @property
    def temperature(self) -> Condition | None:
        """The condition ``temperature``, where the study has it."""
        return next((c for c in self.conditions if c.name == "temperature"), None)

    def at(self, given: dict[str, float]) -> dict[str, float]:
        """Every condition: as given, else at the middle of what is on offer."""
        return {**plainlaw.middles(self.conditions), **given}


def stated_dimension(notes: Notes, entry: Entry) -> Dimension | None:
    """Dimension of the unit in which the constant was given; None where it was given by a half-life."""
    if not isinstance(entry.value, dict):
        found = notes.read(entry)
        return found.dimension if found else None
    for key in ("value", "low", "high"):
        inner = entry.get(key)
        if inner is not None:
            found = notes.read(inner)
            return found.dimension if found else None
    ends = entry.get("uniform")
    first = next(ends.each(), None) if ends is not None else None
    found = notes.read(first) if first is not None and first.value is not None else None
    return found.dimension if found else None


def belief(notes: Notes, entry: Entry, dimension: Dimension, order: bool) -> tuple[Belief, str] | None:
    """(distribution, unit as written) of a constant that is not given by a half-life."""
    if not isinstance(entry.value, dict):
        found = notes.quantity(entry, dimension)
        return (Belief("exact", found.value), found.unit) if found else None
    keys = BELIEF_KEYS & set(entry.value)
    if keys not in FORMS:
        if not notes.lost(entry.where):
            found_words = ", ".join(sorted(keys)) or "none of them"
            advice = ""
            if not keys and "pilot" in entry.value:
                advice = "A pilot is an observation; the constant still needs a belief of its own beside it"
            notes.problem(entry.where, "a belief cannot be read from this", found_words, WAYS, advice)
        return None
    if entry.value.get("fraction") and keys != {"low", "high"} and keys != {"uniform"}:
        notes.problem(
            entry.where, "a fraction is given by low and high, or by uniform", ", ".join(sorted(keys))
        )
        return None
    if keys == {"uniform"}:
        return _uniform(notes, entry, dimension)
    if keys == {"low", "high"}:
        return _low_high(notes, entry, dimension, order)
    return _around(notes, entry, dimension)


def _around(notes: Notes, entry: Entry, dimension: Dimension) -> tuple[Belief, str] | None:
    middle = notes.quantity(entry.get("value"), dimension)
    if entry.get("give_or_take") is not None:
        factor = notes.factor(entry.get("give_or_take"))
        if middle is None or factor is None:
            return None
        if middle.value <= 0:
            advice = "Give `within` instead of a factor"
            where = f"{entry.where}.value"
            notes.problem(where, "out of range", f"{entry.value['value']}", "a value above 0", advice)
            return None
        return Belief("lognormal", log(middle.value), log(factor) / Z90), middle.unit
    if entry.get("within") is None:
        return (Belief("exact", middle.value), middle.unit) if middle else None
    within = notes.positive(entry.get("within"), dimension)
    if middle is None or within is None:
        return None
    family = "positive" if middle.value > 0 else "normal"
    return Belief(family, middle.value, within / Z90), middle.unit


def _ends(
    notes: Notes, entry: Entry, low: Entry | None, high: Entry | None, dimension: Dimension
) -> tuple[float, float, str] | None:
    bottom, top = notes.quantity(low, dimension), notes.quantity(high, dimension)
    if bottom is None or top is None or low is None or high is None:
        return None
    if bottom.value >= top.value:
        notes.problem(
            entry.where, "the range is reversed or empty", f"{low.value} to {high.value}", "low below high"
        )
        return None
    return bottom.value, top.value, bottom.unit


def _uniform(notes: Notes, entry: Entry, dimension: Dimension) -> tuple[Belief, str] | None:
    ends = entry.get("uniform")
    values = [] if ends is None else list(ends.each())
    if len(values) != 2:
        notes.problem(f"{entry.where}.uniform", "not a range", f"{len(values)} values", "two, such as [0, 3]")
        return None
    found = _ends(notes, entry, values[0], values[1], dimension)
    return (Belief("uniform", 0.0, 0.0, found[0], found[1]), found[2]) if found else None


def _low_high(notes: Notes, entry: Entry, dimension: Dimension, order: bool) -> tuple[Belief, str] | None:
    found = _ends(notes, entry, entry.get("low"), entry.get("high"), dimension)
    if found is None:
        return None
    low, high, unit = found
    if entry.value.get("fraction"):
        if not 0 < low < high < 1:
            notes.problem(entry.where, "no fraction", f"{low:g} to {high:g}", "low and high between 0 and 1")
            return None
        low, high = log(low / (1 - low)), log(high / (1 - high))
        return Belief("logitnormal", (low + high) / 2, (high - low) / 2 / Z90), unit
    if order:
        family = "positive" if low >= 0 else "normal"
        return Belief(family, (low + high) / 2, (high - low) / 2 / Z90), unit
    if low <= 0:
        advice = "Give uniform = [low, high], or value and within, where 0 is possible"
        notes.problem(
            f"{entry.where}.low", "out of range", f"{entry.value['low']}", "a value above 0", advice
        )
        return None
    return Belief("lognormal", log(low * high) / 2, log(high / low) / 2 / Z90), unit


def energy(notes: Notes, entry: Entry) -> Belief | None:
    """Belief about an activation energy, J/mol: exact or normal."""
    if not isinstance(entry.value, dict):
        found = notes.quantity(entry, units.MOLAR_ENERGY)
        return Belief("exact", found.value) if found else None
    keys = set(entry.value)
    if keys == {"low", "high"}:
        ends = _ends(notes, entry, entry.get("low"), entry.get("high"), units.MOLAR_ENERGY)
        return Belief("normal", (ends[0] + ends[1]) / 2, (ends[1] - ends[0]) / 2 / Z90) if ends else None
    if keys == {"value"} or keys == {"value", "within"}:
        middle = notes.quantity(entry.get("value"), units.MOLAR_ENERGY)
        within = notes.positive(entry.get("within"), units.MOLAR_ENERGY) if len(keys) == 2 else 0.0
        if middle is None or within is None:
            return None
        return Belief("normal", middle.value, within / Z90) if within else Belief("exact", middle.value)
    if not notes.lost(entry.where):
        expected = "value and within, low and high, or one value"
        notes.problem(entry.where, "an activation energy cannot be read from this", ", ".join(keys), expected)
    return None


def reference_temperature(notes: Notes, entry: Entry, scene: Scene) -> float | None:
    """Temperature (K) at which a constant with an activation energy is stated."""
    if scene.temperature is None:
        advice = 'Add temperature to [conditions], such as temperature = "25 degC"'
        where = f"{entry.where}.activation_energy"
        notes.problem(where, "no temperature among the conditions", advice=advice)
        return None
    at = entry.get("at")
    given = at.get("temperature") if at is not None else None
    if given is not None:
        return notes.positive(given, units.TEMPERATURE)
    if scene.temperature.is_fixed:
        return scene.temperature.low
    advice = 'Add at = { temperature = "..." }, the temperature at which this constant is stated'
    notes.problem(entry.where, "an activation energy without the temperature of the constant", advice=advice)
    return None


def conditions_at(notes: Notes, entry: Entry | None, scene: Scene) -> dict[str, float]:
    """Values of `at`, checked against the conditions of the study."""
    found: dict[str, float] = {}
    known = {condition.name: condition for condition in scene.conditions}
    for name, inner in entry.items() if entry is not None else ():
        if name not in known and notes.excused(name):
            continue
        if name not in known:
            notes.problem(inner.where, f"'{name}' is no condition of this study", advice=near(name, known))
            continue
        value = notes.positive(inner, known[name].dimension, zero=True)
        if value is not None:
            found[name] = value
    return found


def from_half_life(
    notes: Notes,
    entry: Entry,
    name: str,
    steps: tuple[Step, ...],
    others: tuple[Constant, ...],
    scene: Scene,
    candidate: str,
) -> Belief | None:
    """Belief about the constant ``name`` from the half-life of the whole law."""
    inner = entry.get("half_life")
    wanted = notes.positive(inner, units.TIME)
    factor = notes.factor(entry.get("give_or_take")) if entry.get("give_or_take") is not None else 1.0
    given = conditions_at(notes, entry.get("at"), scene)
    if wanted is None or factor is None or inner is None:
        return None
    at = scene.at(given)
    bare, concentrations = plainlaw.split(at, scene.conditions)
    temperature = at.get("temperature")
    values = {c.name: float(plainlaw.at_temperature(c, temperature)) for c in others}
    start = halflife.Start(steps, {**scene.known, **bare, **values}, concentrations)
    if start.amount <= 0 and notes.excused(start.reactant):
        return None
    if start.amount <= 0:
        message = f"'{start.reactant}' is not there at the start, so it has no half-life"
        notes.problem(inner.where, message, advice=f"Give {start.reactant} in `at` or in [conditions]")
        return None
    return _solved(notes, inner, name, start, wanted, factor, candidate, scene.time_unit)


def _solved(
    notes: Notes,
    inner: Entry,
    name: str,
    start: halflife.Start,
    wanted: float,
    factor: float,
    candidate: str,
    time_unit: str,
) -> Belief | None:
    proportional = start.by_extent and halflife.degree(start.steps[0].rate, name) == 1
    times = [wanted] if proportional or factor == 1 else [wanted, wanted * factor, wanted / factor]
    logs = []
    for time in times:
        try:
            logs.append(log(halflife.solve(start, name, time)))
        except halflife.UnreachableError as reason:
            notes.problem(*_unreachable(reason, inner, name, start, time, candidate, time_unit))
            return None
    if factor == 1:
        return Belief("exact", exp(logs[0]))
    spread = log(factor) if proportional else abs(logs[2] - logs[1]) / 2
    return Belief("lognormal", logs[0], spread / Z90)


def _unreachable(
    reason: halflife.UnreachableError,
    inner: Entry,
    name: str,
    start: halflife.Start,
    time: float,
    candidate: str,
    time_unit: str,
) -> tuple[str, str, str, str, str]:
    wanted = units.show(time, time_unit)
    advice = (
        f"Give {name} as a value with give_or_take; a conversion that was seen can stand beside it as a pilot"
    )
    if reason.left is not None:
        message = f"under '{candidate}' the {start.reactant} never falls to half at these conditions"
        return (
            inner.where,
            message,
            f"{100 * reason.left:.3g} % left in the end",
            f"a half-life of {wanted}",
            advice,
        )
    sooner = reason.sooner if reason.sooner is not None and isfinite(reason.sooner) else 0.0
    message = f"under '{candidate}' the {start.reactant} falls to half sooner, whatever {name} is"
    advice = f"Give {name} as a value with give_or_take, or state a shorter half-life or smaller factor"
    found = f"{units.show(sooner, time_unit)} with {name} next to nothing"
    return inner.where, message, found, f"a half-life of {wanted} (an end of the 90 % range counts)", advice


def words(entry: Entry) -> str:
    """How the file gave the constant, in words."""
    if not isinstance(entry.value, dict):
        return f"{entry.value}, exact"
    table = entry.value
    parts = []
    if "half_life" in table:
        parts.append(f"half-life {table['half_life']}")
    if "value" in table:
        exact = "" if {"give_or_take", "within"} & set(table) else ", exact"
        parts.append(f"{table['value']}{exact}")
    if "low" in table:
        parts.append(f"{table['low']} to {table.get('high')} (90 %)")
    if "uniform" in table:
        parts.append("anywhere from {} to {}".format(*table["uniform"]))
    if "give_or_take" in table:
        parts.append(f"give or take a factor of {table['give_or_take']:g} (90 %)")
    if "within" in table:
        parts.append(f"within {table['within']} (90 %)")
    if "at" in table:
        parts.append("at " + ", ".join(f"{name} {value}" for name, value in table["at"].items()))
    return ", ".join(parts)


def pilot(notes: Notes, entry: Entry, species: str, scene: Scene) -> Pilot | None:
    """The observation(s) of one pilot run: conversions of ``species`` at times."""
    given = conditions_at(notes, entry.get("at"), scene)
    open_ones = [c.name for c in scene.conditions if not c.is_fixed and c.name not in given]
    if open_ones and not notes.lost(entry.where):
        advice = "Add them to `at`"
        notes.problem(
            f"{entry.where}.pilot", f"no value for {', '.join(open_ones)} in the pilot run", advice=advice
        )
    error = notes.share(entry.get("error")) if entry.get("error") is not None else PILOT_ERROR
    inner = entry.get("pilot")
    if inner is None:
        notes.missing(
            entry, "pilot", "a pilot without an observation", 'Add pilot = "40 % conversion after 30 min"'
        )
        return None
    entries = list(inner.each()) if isinstance(inner.value, list) else [inner]
    readings = [_observation(notes, each) for each in entries if each.value is not None]
    if open_ones or error is None or any(reading is None for reading in readings):
        return None
    if error == 0:
        notes.problem(f"{entry.where}.error", "out of range", "0", "an error above 0")
        return None
    at = tuple(scene.at(given).items())
    return Pilot(at, tuple(reading for reading in readings if reading), error, species)


def _observation(notes: Notes, entry: Entry) -> tuple[float, float] | None:
    match = _OBSERVATION.fullmatch(entry.value)
    if match is None:
        expected = 'words such as "40 % conversion after 30 min"'
        notes.problem(entry.where, "an observation that cannot be read", f'"{entry.value}"', expected)
        return None
    share = notes.quantity(Entry(entry.where, match["share"]), units.NONE)
    time = notes.positive(Entry(entry.where, match["time"]), units.TIME)
    if share is None or time is None:
        return None
    if not 0 < share.value < 1:
        notes.problem(entry.where, "out of range", match["share"], "a conversion between 0 and 100 %")
        return None
    return time, share.value
