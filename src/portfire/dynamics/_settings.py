"""What a model file may say of one kind of dynamics only: its own table, named as the kind.

A kind is known to model files once it stands in `SETTINGS`. Its settings are a frozen dataclass whose
fields are the keys of the table, each with a default that works; `number` and `choice` say what is
allowed.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any

from portfire.errors import InputError, nearest


def number(default: float, low: float, high: float) -> Any:
    """A key that takes a number from ``low`` to ``high``; a whole number where ``default`` is one."""
    return field(default=default, metadata={"range": (low, high)})


def choice(default: str, *others: str) -> Any:
    """A key that takes one of a few words."""
    return field(default=default, metadata={"choices": (default, *others)})


@dataclass(frozen=True)
class LinearSettings:
    """Linear dynamics have no keys of their own."""


SETTINGS: dict[str, type] = {"linear": LinearSettings}


def read_settings(kind: str, table: Mapping[str, Any], where: str) -> Any:
    """Settings of a kind from its table in a model file.

    Parameters
    ----------
    kind : str
        A key of `SETTINGS`.
    table : mapping
        May be empty.
    where : str
        How messages call the file.

    Raises
    ------
    InputError
        If a key is unknown (names the nearest), or a value is not allowed.
    """
    known = {entry.name: entry for entry in fields(SETTINGS[kind])}
    values = {}
    for key, value in table.items():
        if key not in known:
            hint = nearest(key, list(known))
            tail = f"did you mean {hint!r}?" if hint else f"known are {', '.join(known) or 'none'}."
            raise InputError(f"{where}, [{kind}]: unknown {key!r}; {tail}")
        values[key] = _check(f"{where}: [{kind}] {key} = {value!r}", value, known[key])
    return SETTINGS[kind](**values)


def _check(what: str, value: Any, entry: Any) -> Any:
    choices = entry.metadata.get("choices")
    if choices is not None:
        if value not in choices:
            hint = nearest(str(value), choices)
            raise InputError(
                f"{what} should be one of {', '.join(choices)}{f', did you mean {hint!r}?' if hint else '.'}"
            )
        return value
    low, high = entry.metadata["range"]
    whole = isinstance(entry.default, int)
    good = isinstance(value, int if whole else int | float) and not isinstance(value, bool)
    if not good or not low <= value <= high:
        word = "a whole number" if whole else "a number"
        raise InputError(f"{what} should be {word} from {low} to {high}.")
    return value if whole else float(value)
