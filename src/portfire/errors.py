"""Errors that a user can act on."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class PortfireError(Exception):
    """The job failed; the message is one plain sentence. The command exits with status 1."""


class InputError(PortfireError):
    """The input or the command is wrong; the message is one plain sentence. Exit status 2."""


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Return the known word that looks most like `word`.

    Parameters
    ----------
    word : str
        What was received.
    known : iterable of str
        What would have been right.

    Returns
    -------
    str or None
        The nearest known word, or None where none comes near.
    """
    by_lower: dict[str, str] = {}
    for entry in known:
        by_lower.setdefault(entry.lower(), entry)
    found = difflib.get_close_matches(word.lower(), list(by_lower), n=1, cutoff=0.5)
    return by_lower[found[0]] if found else None
