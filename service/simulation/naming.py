"""Patterns by name and parameters, as in ``lognormal:sigma=0.45,per_day=50``."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import Field, fields
from typing import Any, TypeVar

from service.simulation.fraud import Fraud
from service.simulation.source import Pattern

Kind = TypeVar("Kind", Pattern, Fraud)


def named(text: str, patterns: Mapping[str, type[Kind]]) -> Kind:
    """Return a pattern from its name and, after a colon, its parameters.

    Raises
    ------
    ValueError
        If the name or a parameter is unknown or out of its range; the message says what there is.
    """
    name, _, rest = text.partition(":")
    if name not in patterns:
        raise ValueError(f"no pattern {name!r}{_near(name, patterns)}")
    kind = patterns[name]
    known = {f.name: f for f in parameters(kind)}
    given: dict[str, Any] = {}
    for part in filter(None, rest.split(",")):
        key, equals, value = part.partition("=")
        if key not in known:
            raise ValueError(f"{name} has no parameter {key!r}{_near(key, known)}")
        if not equals or key in given:
            raise ValueError(f"{name}: {key} must be given once, as {key}={known[key].default}")
        whole = isinstance(known[key].default, int)
        try:
            given[key] = int(value) if whole else float(value)
        except ValueError as error:
            expected = "a whole number" if whole else "a number"
            raise ValueError(f"{name}: {key} must be {expected}, got {value!r}") from error
    try:
        return kind(**given)
    except ValueError as error:
        raise ValueError(f"{name}: {error}") from error


def parameters(kind: type[Pattern] | type[Fraud]) -> list[Field[float]]:
    """Return the parameters of a pattern that are numbers."""
    return [f for f in fields(kind) if isinstance(f.default, int | float)]


def described(patterns: Mapping[str, type[Pattern]] | Mapping[str, type[Fraud]]) -> str:
    """Return a list of patterns: name, parameters with their defaults, and what they are."""
    lines = []
    for name, kind in patterns.items():
        settings = ",".join(f"{f.name}={f.default}" for f in parameters(kind))
        about = (kind.__doc__ or "").strip().split("\n\n")[0]
        lines.append(f"{name}{':' if settings else ''}{settings}\n    {' '.join(about.split())}")
    return "\n".join(lines)


def _near(word: str, there: Mapping[str, object]) -> str:
    near = difflib.get_close_matches(word, there, 1)
    return f"; did you mean {near[0]}?" if near else f"; there are: {', '.join(there) or 'none'}"
