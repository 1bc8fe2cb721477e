"""What a job file may hold: one table of keys, with type, allowed values and default."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from portfire.accounts import SOURCES
from portfire.errors import InputError, nearest

COLUMNS = (
    "unit",
    "time_s",
    "set_s",
    "response_s",
    "end_s",
    "sample_s",
    "context",
    "target_s",
    "include",
    "trial",
)


# How a task may deal labels to trials.
ASSIGNMENTS = ("free", "blocked", "sequence")


@dataclass(frozen=True)
class Rule:
    """One key of a job file.

    Parameters
    ----------
    table, key : str
        Where it stands; an empty table is the top of the file.
    default : object
        Its value where the file has none.
    allowed : str
        What is right, as it reads after "must be".
    read : callable
        Turns the TOML value into the value used; raises ValueError where that is not allowed.
    choices : tuple of str
        Known words, for a near miss.
    """

    table: str
    key: str
    default: Any
    allowed: str
    read: Callable[[Any], Any]
    choices: tuple[str, ...] = ()

    @property
    def name(self) -> str:
        """How messages call the key."""
        return f"[{self.table}] {self.key}" if self.table else self.key


def _integer(low: int, high: float = math.inf) -> Callable[[Any], int]:
    def read(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise ValueError
        return value

    return read


def _number(holds: Callable[[float], bool]) -> Callable[[Any], float]:
    def read(value: Any) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise ValueError
        if not math.isfinite(value) or not holds(value):
            raise ValueError
        return float(value)

    return read


def _flag(value: Any) -> bool:
    if not isinstance(value, bool):
        raise ValueError
    return value


def _text(value: Any) -> str:
    if not isinstance(value, str) or not value.strip():
        raise ValueError
    return value


def _list_of(read: Callable[[Any], Any], least: int = 0, ordered: bool = False) -> Callable[[Any], Any]:
    def read_list(value: Any) -> tuple[Any, ...]:
        if not isinstance(value, list | tuple) or len(value) < least:
            raise ValueError
        items = tuple(read(item) for item in value)
        if len(set(items)) < len(items):
            raise ValueError
        return tuple(sorted(items)) if ordered else items

    return read_list


def _one_or_list(value: Any) -> tuple[str, ...]:
    return _list_of(_text, least=1)([value] if isinstance(value, str) else value)


def _word_in(words: tuple[str, ...]) -> Callable[[Any], str]:
    def read(value: Any) -> str:
        if value not in words:
            raise ValueError
        return str(value)

    return read


RULES = (
    Rule("", "session", None, "the path of a session, or a list of different paths", _one_or_list),
    Rule("", "out", None, "the path of a folder", _text),
    Rule("", "seed", 0, "an integer from 0 to 4294967295", _integer(0, 2**32 - 1)),
    *(Rule("columns", name, None, "the name of a column, as text", _text) for name in COLUMNS),
    Rule(
        "window", "bin_s", 0.02, "a number of seconds from 0.001 to 0.5", _number(lambda x: 1e-3 <= x <= 0.5)
    ),
    Rule("window", "before_set_s", 0.0, "a number of seconds from 0 to 10", _number(lambda x: 0 <= x <= 10)),
    Rule("window", "min_rate_hz", 0.5, "a number of spikes/s, 0 or more", _number(lambda x: x >= 0)),
    Rule(
        "model",
        "file",
        ("linear",),
        "the path or the shipped name of a model file, or a list of different ones",
        _one_or_list,
    ),
    Rule(
        "compare",
        "sources",
        SOURCES,
        f"a list of different sources out of {', '.join(SOURCES)}",
        _list_of(_word_in(SOURCES)),
        SOURCES,
    ),
    Rule("compare", "folds", 5, "an integer, 2 or more", _integer(2)),
    Rule(
        "compare",
        "latent_dims",
        None,
        "a list of different integers, each 1 or more",
        _list_of(_integer(1), least=1, ordered=True),
    ),
    Rule("compare", "min_gain", 0.05, "a number of nats/trial, 0 or more", _number(lambda x: x >= 0)),
    Rule(
        "decode",
        "cutoffs_s",
        (0.1, 0.2, 0.3),
        "a list of different numbers of seconds, each 0 or more",
        _list_of(_number(lambda x: x >= 0), ordered=True),
    ),
    Rule("decode", "draws", 1000, "an integer, 1 or more", _integer(1)),
    Rule("tests", "level", 0.05, "a number between 0 and 1", _number(lambda x: 0 < x < 1)),
    Rule("tests", "thorough", False, "true or false", _flag),
    Rule("tests", "bootstrap", 0, "a number of draws, an integer, 0 or more", _integer(0)),
    Rule("tests", "assignment", "free", f"one of {', '.join(ASSIGNMENTS)}", _word_in(ASSIGNMENTS)),
    Rule("tests", "unseen_conditions", False, "true or false", _flag),
)
TABLES = tuple(dict.fromkeys(rule.table for rule in RULES if rule.table))


def read_settings(raw: Mapping[str, Any], where: str) -> dict[str, dict[str, Any]]:
    """Check the content of a job file against the table of rules and fill in the defaults.

    Parameters
    ----------
    raw : mapping
        Content of the file, as TOML gives it.
    where : str
        What messages call the file.

    Returns
    -------
    dict of str to dict
        A value for every key of every table; the top of the file is under the empty name.

    Raises
    ------
    InputError
        If a table or key is not known (names the nearest), or a value is not allowed.
    """
    top = {name: value for name, value in raw.items() if name not in TABLES}
    given: dict[str, Any] = {"": top, **{name: raw.get(name, {}) for name in TABLES}}
    for table in TABLES:
        if not isinstance(given[table], Mapping):
            raise InputError(f"{where}: {table} must be a table, [{table}], but is {given[table]!r}")
    for table, content in given.items():
        _reject_unknown(table, content, where)
    settings: dict[str, dict[str, Any]] = {table: {} for table in given}
    for rule in RULES:
        content = given[rule.table]
        value = _read(rule, content[rule.key], where) if rule.key in content else rule.default
        settings[rule.table][rule.key] = value
    return settings


def _read(rule: Rule, value: Any, where: str) -> Any:
    try:
        return rule.read(value)
    except (ValueError, TypeError):
        message = f"{where}: {rule.name} must be {rule.allowed}, but is {value!r}"
        if rule.choices and isinstance(value, list | tuple):
            for word in (item for item in value if item not in rule.choices):
                near = nearest(str(word), rule.choices)
                message += f"; did you mean {near!r} for {word!r}?" if near else ""
        raise InputError(message) from None


def _reject_unknown(table: str, content: Mapping[str, Any], where: str) -> None:
    known = [rule.key for rule in RULES if rule.table == table]
    for key, value in content.items():
        if key in known:
            continue
        if not table and isinstance(value, Mapping):
            raise InputError(f"{where}: unknown table [{key}]{_remedy(key, [f'[{t}]' for t in TABLES])}")
        place = f"unknown key {key!r}" + (f" in [{table}]" if table else "")
        raise InputError(f"{where}: {place}{_remedy(key, _candidates(key, table, known))}")


def _candidates(key: str, table: str, known: list[str]) -> list[str]:
    elsewhere = [rule.name for rule in RULES if rule.key == key and rule.table != table]
    return elsewhere if elsewhere else known + ([f"[{t}]" for t in TABLES] if not table else [])


def _remedy(word: str, known: list[str]) -> str:
    if len(known) == 1:
        return f"; it belongs as {known[0]}"
    near = nearest(word, known)
    return f"; did you mean {near}?" if near else f"; known are {', '.join(known)}"
