"""Model files: what is fitted, read from TOML."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

from portfire.dynamics._models import find_model
from portfire.dynamics._settings import SETTINGS, read_settings
from portfire.errors import InputError, nearest

_CHOICES = {
    ("model", "dynamics"): tuple(SETTINGS),
    ("model", "readout"): ("poisson", "gaussian"),
    ("drift", "use"): ("choose", "on", "off"),
}
_RANGES = {
    ("cue_response", "duration_s"): (0.0, 2.0, float),
    ("cue_response", "n_bumps"): (0, 12, int),
    ("drift", "sd_log_rate"): (0.01, 3.0, float),
    ("drift", "timescale"): (0.02, 2.0, float),
    ("noise", "initial_s"): (0.0, 5.0, float),
}


@dataclass(frozen=True)
class SimulateSettings:
    """What `simulate` draws when a model file has no fitted parameters."""

    latent_dim: int = 3
    trials: int = 400
    units: int = 60
    sample_s: tuple[float, ...] = (0.5, 0.7, 0.9)
    contexts: tuple[str, ...] = ("low hum", "mid hum", "high hum")
    extra_s: tuple[float, ...] = (0.0, 0.15, 0.3)
    account: str = "interval=sustained,context=initial,trial=initial"
    mean_rate_hz: float = 12.0


@dataclass(frozen=True)
class ModelFile:
    """A kind of dynamics with its readout and nuisance terms.

    Parameters
    ----------
    name : str
        The shipped name or the file's stem.
    dynamics, readout : str
        Kind of dynamics and of observation noise.
    cue_duration_s, n_bumps : float, int
        Raised-cosine response to the set cue itself: seconds and number of bumps.
    drift : {"choose", "on", "off"}
        Whether each unit's rate may change slowly over the session.
    drift_sd, drift_timescale : float
        Prior SD of the log rate's slow change, and its length scale as a share of the session.
    initial_noise_s : float
        Every account's initial state carries the noise that the dynamics accumulate in this time (s).
    settings : frozen dataclass
        What only this kind of dynamics has, of the class in `SETTINGS`; its defaults if not given.
    """

    name: str = "linear"
    dynamics: str = "linear"
    readout: str = "poisson"
    cue_duration_s: float = 0.25
    n_bumps: int = 3
    drift: str = "choose"
    drift_sd: float = 0.3
    drift_timescale: float = 0.2
    initial_noise_s: float = 0.3
    simulate: SimulateSettings = field(default_factory=SimulateSettings)
    settings: Any = None

    def __post_init__(self) -> None:
        own = SETTINGS[self.dynamics]
        if self.settings is None:
            object.__setattr__(self, "settings", own())
        elif not isinstance(self.settings, own):
            raise ValueError(f"dynamics {self.dynamics!r} take {own.__name__}, received {self.settings!r}.")


_KEYS = {
    "model": {"dynamics": "dynamics", "readout": "readout"},
    "cue_response": {"duration_s": "cue_duration_s", "n_bumps": "n_bumps"},
    "drift": {"use": "drift", "sd_log_rate": "drift_sd", "timescale": "drift_timescale"},
    "noise": {"initial_s": "initial_noise_s"},
    "simulate": {name: name for name in SimulateSettings.__dataclass_fields__},
}


def _unknown(where: str, word: str, known: list[str]) -> InputError:
    hint = nearest(word, known)
    tail = f"did you mean {hint!r}?" if hint else f"known are {', '.join(known)}."
    return InputError(f"{where}: unknown {word!r}; {tail}")


def _check(where: str, table: str, key: str, value: Any) -> Any:
    choices = _CHOICES.get((table, key))
    if choices and value not in choices:
        hint = nearest(str(value), choices)
        tail = f", did you mean {hint!r}?" if hint else "."
        raise InputError(f"{where}: [{table}] {key} = {value!r} should be one of {', '.join(choices)}{tail}")
    if (table, key) in _RANGES:
        low, high, kind = _RANGES[table, key]
        good = isinstance(value, int | float) and not isinstance(value, bool) and low <= value <= high
        if not good or (kind is int and not isinstance(value, int)):
            word = "a whole number" if kind is int else "a number"
            raise InputError(f"{where}: [{table}] {key} = {value!r} should be {word} from {low} to {high}.")
    if table == "simulate":
        default = getattr(SimulateSettings(), key)
        if isinstance(default, tuple):
            if not isinstance(value, list) or not value or any(type(v) is not type(value[0]) for v in value):
                raise InputError(
                    f"{where}: [simulate] {key} = {value!r} should be a list, as {list(default)!r}."
                )
            return tuple(float(v) if isinstance(default[0], float) else v for v in value)
        if isinstance(default, int | float) and (
            isinstance(value, bool) or not isinstance(value, int | float)
        ):
            raise InputError(f"{where}: [simulate] {key} = {value!r} should be a number, as {default!r}.")
        if isinstance(default, int | float) and not value > 0:
            raise InputError(f"{where}: [simulate] {key} = {value!r} should be above zero.")
    return value


def model_from_dict(tables: Mapping[str, Any], name: str, where: str) -> ModelFile:
    """Build a model from nested tables as they stand in a model file."""
    fields: dict[str, Any] = {"name": name}
    for table, content in tables.items():
        if table not in _KEYS and table not in SETTINGS:
            raise _unknown(where, table, [*_KEYS, *SETTINGS])
        if not isinstance(content, Mapping):
            raise InputError(f"{where}: {table!r} should be a table, as [{table}].")
    for table, content in tables.items():
        if table in SETTINGS:
            continue
        values = {}
        for key, value in content.items():
            if key not in _KEYS[table]:
                raise _unknown(f"{where}, [{table}]", key, list(_KEYS[table]))
            values[_KEYS[table][key]] = _check(where, table, key, value)
        if table == "simulate":
            fields["simulate"] = SimulateSettings(**values)
        else:
            fields.update(values)
    kind = fields.get("dynamics", "linear")
    for table in tables:
        if table in SETTINGS and table != kind:
            raise InputError(
                f"{where}: [{table}] belongs to dynamics = {table!r}, but dynamics = {kind!r} here; change "
                "one of them."
            )
    fields["settings"] = read_settings(kind, tables.get(kind, {}), where)
    return ModelFile(**fields)


def read_model(model: str | Path | Mapping[str, Any] | ModelFile) -> ModelFile:
    """Read a model: a shipped name, a path to a TOML file, or nested tables.

    Raises
    ------
    InputError
        If the file is missing, is not TOML, or holds an unknown key or a value out of range.
    """
    if isinstance(model, ModelFile):
        return model
    if isinstance(model, Mapping):
        return model_from_dict(model, str(model.get("model", {}).get("dynamics", "linear")), "model")
    path = find_model(str(model))
    try:
        tables = tomllib.loads(path.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: this is not a TOML file ({error}).") from error
    return model_from_dict(tables, path.stem, str(path))


def model_to_dict(model: ModelFile) -> dict[str, Any]:
    """Nested tables as they stand in a model file; `read_model` takes them back."""
    tables: dict[str, Any] = {
        table: {key: getattr(model, name) for key, name in keys.items()}
        for table, keys in _KEYS.items()
        if table != "simulate"
    }
    tables["simulate"] = {
        key: list(value) if isinstance(value, tuple) else value for key, value in vars(model.simulate).items()
    }
    if own := asdict(model.settings):
        tables[model.dynamics] = own
    return tables
