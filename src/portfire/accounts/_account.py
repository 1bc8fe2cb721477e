"""An account: one route for every source."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from portfire.errors import InputError, nearest

SOURCES = ("interval", "context", "trial")
ROUTES = ("none", "initial", "sustained", "both")


def _reject(word: str, kind: str, known: tuple[str, ...], text: str) -> InputError:
    hint = nearest(word, known)
    did_you_mean = f", did you mean {hint!r}?" if hint else "."
    return InputError(f"account {text!r}: {word!r} is no {kind}; known are {', '.join(known)}{did_you_mean}")


@dataclass(frozen=True)
class Account:
    """A hypothesis that can be fitted and scored: one route for every source.

    Parameters
    ----------
    interval, context, trial : {"none", "initial", "sustained", "both"} or None
        The route by which the source may push the latent state; None marks a source that the
        session does not have, which is then left out of the written form.
    """

    interval: str | None = "none"
    context: str | None = "none"
    trial: str | None = "none"

    def __post_init__(self) -> None:
        for source in SOURCES:
            route = getattr(self, source)
            if route is not None and route not in ROUTES:
                raise _reject(str(route), "route", ROUTES, f"{source}={route}")

    @classmethod
    def parse(cls, text: str | Account | Mapping[str, str]) -> Account:
        """Read ``interval=both,context=initial,trial=initial``; a source left out is ``none``."""
        if isinstance(text, Account):
            return text
        if isinstance(text, Mapping):
            text = ",".join(f"{source}={route}" for source, route in text.items())
        routes: dict[str, str] = {}
        for part in filter(None, (piece.strip() for piece in text.split(","))):
            source, equals, route = (piece.strip() for piece in part.partition("="))
            if not equals:
                raise InputError(
                    f"account {text!r}: {part!r} should read source=route, as in context=initial."
                )
            if source not in SOURCES:
                raise _reject(source, "source", SOURCES, text)
            if source in routes:
                raise InputError(f"account {text!r}: the source {source!r} stands twice; give it once.")
            if route not in ROUTES:
                raise _reject(route, "route", ROUTES, text)
            routes[source] = route
        return cls(**routes)

    @classmethod
    def full(cls, sources: tuple[str, ...] = SOURCES) -> Account:
        """The account with every source of ``sources`` by both routes; the others are absent."""
        return cls(**{source: "both" if source in sources else None for source in SOURCES})

    def route(self, source: str) -> str:
        """The route of ``source``; an absent source has the route ``none``."""
        return getattr(self, source) or "none"

    def allows(self, source: str, persistence: float) -> bool:
        """Whether ``source`` may push with this persistence (0 initial, infinite sustained)."""
        wanted = "initial" if persistence == 0 else "sustained"
        return self.route(source) in (wanted, "both")

    def replace(self, source: str, route: str) -> Account:
        """The same account with another route for one source."""
        return Account(**{s: route if s == source else getattr(self, s) for s in SOURCES})

    def restrict(self, sources: tuple[str, ...]) -> Account:
        """The account over the sources that a session has; the others become absent."""
        return Account(**{s: self.route(s) if s in sources else None for s in SOURCES})

    def contains(self, other: Account) -> bool:
        """Whether every push that ``other`` allows is allowed here too (nesting)."""
        return all(
            self.allows(source, h)
            for source in SOURCES
            for h in (0.0, float("inf"))
            if other.allows(source, h)
        )

    def n_pushes(self) -> int:
        """Number of source-route pairs that this account allows."""
        return sum({"none": 0, "both": 2}.get(self.route(source), 1) for source in SOURCES)

    def __str__(self) -> str:
        return ",".join(f"{s}={getattr(self, s)}" for s in SOURCES if getattr(self, s) is not None)
