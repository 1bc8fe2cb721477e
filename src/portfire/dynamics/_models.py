"""Where model files are found: by path, or by the name of one that the package ships."""

from __future__ import annotations

from pathlib import Path

from portfire.errors import InputError, nearest

_PACKAGE = Path(__file__).resolve().parents[1]
_WHEEL_FOLDER = _PACKAGE / "_models"
_CHECKOUT_FOLDER = _PACKAGE.parents[1] / "models"


def shipped_models() -> tuple[str, ...]:
    """Name the model files that come with the package, in alphabetical order.

    Returns
    -------
    tuple of str
        File names without ``.toml``; each is a valid argument of `find_model`.
    """
    return tuple(sorted(path.stem for path in _shipped_folder().glob("*.toml")))


def find_model(name: str | Path, base: str | Path | None = None) -> Path:
    """Find a model file by its path or by its shipped name.

    Text with a folder separator or the suffix ``.toml`` is a path; all other text is a shipped name, so
    that a file or folder that happens to be called ``linear`` never hides the shipped model.

    Parameters
    ----------
    name : str or Path
        A path such as ``"models/mine.toml"``, or a shipped name such as ``"linear"``.
    base : str or Path, optional
        The folder that a relative path starts from; the current folder if not given.

    Returns
    -------
    Path
        An existing file.

    Raises
    ------
    InputError
        If there is no such file, or no shipped model of that name; names the nearest one.
    """
    text = str(name)
    if isinstance(name, Path) or "/" in text or "\\" in text or text.endswith(".toml"):
        return _existing_file(Path(base or ".") / name)
    known = shipped_models()
    if text in known:
        return _shipped_folder() / f"{text}.toml"
    raise InputError(f'There is no shipped model "{text}"{_remedy(text, known)}')


def _shipped_folder() -> Path:
    return _WHEEL_FOLDER if _WHEEL_FOLDER.is_dir() else _CHECKOUT_FOLDER


def _existing_file(path: Path) -> Path:
    if path.is_file():
        return path
    what = "is a folder, not a model file" if path.is_dir() else "does not exist"
    raise InputError(f"The model file {path} {what}{_remedy(path.stem, shipped_models())}")


def _remedy(word: str, known: tuple[str, ...]) -> str:
    near = nearest(word, known)
    if near is not None:
        return f'; did you mean the shipped model "{near}"?'
    return f"; give the path of a .toml file or one of the shipped names: {', '.join(known)}."
