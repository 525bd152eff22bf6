"""From a failed validation of the run file to one line that says what, where and what to do."""

from __future__ import annotations

import difflib
from typing import Any, get_args

from pydantic import BaseModel
from pydantic_core import ErrorDetails

from xcorr.errors import SettingsError


def in_words(location: tuple[str | int, ...]) -> str:
    """The place of a value as the run file shows it.

    Examples
    --------
    >>> in_words(("search", "velocity_km_s"))
    '[search].velocity_km_s'
    >>> in_words(("exposure", 1, "file"))
    '[[exposure]] 2: file'
    """
    if not location:
        return "run file"
    head, *rest = location
    if head in ("exposure", "template"):
        if not rest:
            return f"[[{head}]]"
        number, *rest = rest
        text, joint = f"[[{head}]] {int(number) + 1}", ": "
    else:
        text, joint = f"[{head}]", "."
    for part in rest:
        text += f" value {part + 1}" if isinstance(part, int) else f"{joint}{part}"
    return text


_EXPECTED = {
    "float_type": "a number",
    "int_type": "a whole number",
    "string_type": "text in quotes",
    "bool_type": "true or false",
    "tuple_type": "a list",
    "model_type": "a table",
    "is_instance_of": "a file name in quotes",
    "missing": "",
}


_ADVICE = {
    "resolving_power": "give R = lambda/FWHM, or a file",
    "velocity_km_s": "write [start, stop, step] in km/s",
    "companion_xy": "write [x, y] in zero-based pixels",
    "star_xy": "write [x, y] in zero-based pixels",
    "mask_sources": "write [[x, y, radius], ...] in zero-based pixels",
    "companion_offset_arcsec": "write [east, north] in arcsec",
    "wavelength_range_um": "write [low, high] in micrometre",
    "mask_wavelength_um": "write [[low, high], ...] in micrometre",
    "site": "write [longitude_deg, latitude_deg, height_m]",
    "coordinates": "write [right_ascension_deg, declination_deg]",
    "reference": 'write "brightest", "none" or a file name',
    "molecules": 'write a list of names, e.g. ["CO", "H2O"]',
}


def settings_error(
    model: type[BaseModel], detail: ErrorDetails, prefix: tuple[str | int, ...]
) -> SettingsError:
    """The one-line error of a failed validation."""
    location, table = _known_location(model, detail["loc"])
    words = in_words((*prefix, *location))
    kind, context, got = detail["type"], detail.get("ctx", {}), detail["input"]
    if kind == "extra_forbidden":
        return _unknown_key(str(detail["loc"][-1]), table, (*prefix, *location))
    if kind == "xcorr":
        return _rule_error(words, got, context, at_top=not location and not prefix)
    key = next((part for part in reversed(location) if isinstance(part, str)), "")
    advice = _ADVICE.get(key, "correct it; docs/run-file.md describes every key")
    if kind == "missing":
        if isinstance(location[-1], int):
            return SettingsError(
                f"{in_words((*prefix, *location[:-1]))} has too few values", _shown(got), advice
            )
        return SettingsError(f"{words} is missing", "nothing", "add it to the run file")
    if kind == "literal_error":
        return SettingsError(f"{words} must be one of {context['expected']}", _shown(got), advice)
    if kind in ("too_long", "too_short"):
        return SettingsError(f"{words} has the wrong number of values", _shown(got), advice)
    if expected := _EXPECTED.get(kind):
        return SettingsError(f"{words} must be {expected}", _shown(got), advice)
    message = detail["msg"].removeprefix("Input should ").removeprefix("Value should ")
    return SettingsError(f"{words} must {message}", _shown(got), advice)


def _rule_error(words: str, got: Any, context: dict[str, Any], *, at_top: bool) -> SettingsError:
    """The error of one of the rules in `xcorr.config`: about one value, or a whole table.

    A rule about a table begins with the key that breaks it, where one key does.
    """
    problem, advice, said = context["problem"], context["do"], context["got"]
    key = problem.split()[0]
    if at_top:
        return SettingsError(problem, said, advice)
    if isinstance(got, dict) and key in got:
        return SettingsError(f"{words}.{problem}", said or _shown(got[key]), advice)
    return SettingsError(f"{words} {problem}", said or _shown(got), advice)


def _known_location(
    model: type[BaseModel], location: tuple[str | int, ...]
) -> tuple[tuple[str | int, ...], type[BaseModel]]:
    """The part of a pydantic location that the run file knows, and the innermost table it enters.

    pydantic appends the names of union members to a location; they mean nothing to a user.
    """
    table: type[BaseModel] | None = model
    kept: list[str | int] = []
    innermost = model
    for part in location:
        if isinstance(part, int):
            kept.append(part)
        elif table is not None and part in table.model_fields:
            kept.append(part)
            table = _table_of(table.model_fields[part].annotation)
            innermost = table or innermost
        else:
            break
    return tuple(kept), innermost


def _table_of(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((found for part in get_args(annotation) if (found := _table_of(part))), None)


def _unknown_key(key: str, table: type[BaseModel], location: tuple[str | int, ...]) -> SettingsError:
    known = list(table.model_fields)
    near = difflib.get_close_matches(key, known, n=1, cutoff=0.5)
    where = in_words(location) if location else "the run file"
    advice = f"did you mean {near[0]}?" if near else f"known keys: {', '.join(known)}"
    return SettingsError(f"unknown key in {where}", repr(key), advice)


def unknown_molecule(name: str, known: tuple[str, ...]) -> SettingsError:
    """The error of a molecule that no built-in template is made of."""
    lowered = {item.lower(): item for item in known}
    near = difflib.get_close_matches(name.lower(), list(lowered), n=1, cutoff=0.5)
    advice = f"did you mean {lowered[near[0]]}?" if near else f"use {', '.join(known)}"
    return SettingsError(
        "[search].molecules: no such built-in template", repr(name), f"{advice}; else give a [[template]]"
    )


def _shown(value: Any) -> str:
    """A value as text, short enough for a one-line error."""
    if isinstance(value, dict):
        return "a table"
    text = f"[{', '.join(_shown(item) for item in value)}]" if isinstance(value, tuple) else repr(value)
    return text if len(text) <= 80 else text[:77] + "..."
