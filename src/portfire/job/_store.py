"""A store of results, each under the hash of what determines it."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import uuid
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from portfire.errors import PortfireError
from portfire.job._atomic import sync_folder, sync_path, write_json_atomic

META, ARRAYS, SEAL = "fit.json", "arrays.npz", "complete.json"
_UNFINISHED = ".unfinished-"


@dataclass(frozen=True)
class Store:
    """Results on disk, one folder a key, each either whole or absent.

    Parameters
    ----------
    path : Path
        Folder that holds one folder a key. Inside each: ``fit.json`` (plain values),
        ``arrays.npz`` (arrays, read with ``allow_pickle=False``) and ``complete.json``
        (the SHA-256 of both, by which a damaged entry is known).
    """

    path: Path

    def folder(self, key: str) -> Path:
        """Return the folder of one entry, whether or not it is there."""
        return self.path / key

    def list_keys(self) -> tuple[str, ...]:
        """Return the keys of all entries, intact or not, in alphabetical order."""
        if not self.path.is_dir():
            return ()
        return tuple(sorted(p.name for p in self.path.iterdir() if p.is_dir() and p.name[0] != "."))

    def fault(self, key: str) -> str | None:
        """Say what is wrong with an entry: None if it is intact, a sentence otherwise."""
        folder = self.folder(key)
        if not folder.is_dir():
            return f"{folder}: there is no such entry"
        try:
            seal = json.loads((folder / SEAL).read_text(encoding="utf-8"))
            digests = dict(seal["sha256"])
            if seal["key"] != key or set(digests) != {META, ARRAYS}:
                return f"{folder / SEAL}: does not describe this entry"
        except (OSError, ValueError, TypeError, KeyError) as error:
            return f"{folder / SEAL}: cannot be read ({type(error).__name__})"
        for name, digest in digests.items():
            try:
                found = _hash_file(folder / name)
            except OSError as error:
                return f"{folder / name}: cannot be read ({error.strerror})"
            if found != digest:
                return f"{folder / name}: does not match its checksum"
        return None

    def has(self, key: str) -> bool:
        """Return whether an entry is there and intact."""
        return self.folder(key).is_dir() and self.fault(key) is None

    def read_meta(self, key: str) -> dict[str, Any]:
        """Return the plain values (``fit.json``) of an intact entry.

        Raises
        ------
        PortfireError
            If the entry is absent or damaged.
        """
        self._require(key)
        meta: dict[str, Any] = json.loads((self.folder(key) / META).read_text(encoding="utf-8"))
        return meta

    def read(self, key: str) -> tuple[dict[str, Any], dict[str, np.ndarray]]:
        """Return plain values and arrays of an intact entry.

        Raises
        ------
        PortfireError
            If the entry is absent or damaged.
        """
        meta = self.read_meta(key)
        with np.load(self.folder(key) / ARRAYS, allow_pickle=False) as file:
            arrays = {name: file[name] for name in file.files}
        return meta, arrays

    def write(
        self,
        key: str,
        meta: Mapping[str, Any],
        arrays: Mapping[str, np.ndarray] | None = None,
        compress: bool = False,
    ) -> Path:
        """Write one entry; it appears whole or not at all.

        Parameters
        ----------
        key : str
            See `task_key`.
        meta : mapping
            Plain values; numbers that are not finite become null.
        arrays : mapping of str to array, optional
            Numbers, booleans or text; object arrays are refused.
        compress : bool
            Deflate the arrays: slower to write, smaller on disk.

        Returns
        -------
        Path
            The folder of the entry.

        Raises
        ------
        TypeError
            If an array holds objects, or a value has no JSON form.
        """
        with self.writing(key) as folder:
            write_json_atomic(folder / META, meta)
            save_arrays(folder / ARRAYS, arrays or {}, compress)
        return self.folder(key)

    @contextmanager
    def writing(self, key: str) -> Iterator[Path]:
        """Yield a folder to write ``fit.json`` and ``arrays.npz`` into, then make it the entry.

        If the block raises, nothing is left. An intact entry under the same key stays; a damaged
        one is replaced.
        """
        self.path.mkdir(parents=True, exist_ok=True)
        draft = self.path / f"{_UNFINISHED}{key}-{uuid.uuid4().hex[:8]}"
        draft.mkdir()
        try:
            yield draft
            if not (draft / ARRAYS).exists():
                save_arrays(draft / ARRAYS, {})
            for name in (META, ARRAYS):
                sync_path(draft / name)
            digests = {name: _hash_file(draft / name) for name in (META, ARRAYS)}
            write_json_atomic(draft / SEAL, {"key": key, "sha256": digests})
            sync_folder(draft)
            if self.folder(key).exists() and self.fault(key) is not None:
                self.remove(key)
            if not self.folder(key).exists():
                os.rename(draft, self.folder(key))
                sync_folder(self.path)
        finally:
            shutil.rmtree(draft, ignore_errors=True)

    def remove(self, key: str) -> None:
        """Remove an entry; a reader never sees half of it."""
        doomed = self.path / f"{_UNFINISHED}{key}-{uuid.uuid4().hex[:8]}"
        os.rename(self.folder(key), doomed)
        shutil.rmtree(doomed)

    def clean(self) -> tuple[str, ...]:
        """Remove what writers that were killed left behind; return the names of those folders.

        Call it only while nobody else writes to this store.
        """
        if not self.path.is_dir():
            return ()
        left = sorted(p for p in self.path.iterdir() if p.name.startswith(_UNFINISHED))
        for path in left:
            shutil.rmtree(path)
        return tuple(path.name for path in left)

    def _require(self, key: str) -> None:
        fault = self.fault(key)
        if fault is not None:
            raise PortfireError(f"{fault}; run the job again to redo it")


def task_key(**parts: Any) -> str:
    """Hash what determines a result into 16 hexadecimal digits.

    Parameters
    ----------
    **parts
        Text, numbers, booleans, None, paths, arrays, and lists, tuples, sets or mappings of
        these. Integer 1, real 1.0 and True are three different values; a list and a tuple of the
        same values are the same.

    Returns
    -------
    str
        First 16 hexadecimal digits of the SHA-256 of the canonical JSON.

    Raises
    ------
    TypeError
        If a part has no canonical form.
    ValueError
        If a number is not finite.
    """
    text = json.dumps(_canonical(parts), sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()[:16]


def save_arrays(path: Path, arrays: Mapping[str, np.ndarray], compress: bool = False) -> None:
    """Write arrays to one ``.npz`` file; refuses arrays of objects, which would need pickling.

    Raises
    ------
    TypeError
        If an array holds objects.
    """
    plain = {name: np.asarray(array) for name, array in arrays.items()}
    for name, array in plain.items():
        if array.dtype.hasobject:
            raise TypeError(f"{path}: array {name!r} holds objects; numbers, booleans or text are needed")
    save: Any = np.savez_compressed if compress else np.savez
    save(path, **plain)


def _hash_file(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _canonical(value: Any) -> Any:
    if isinstance(value, Mapping):
        if not all(isinstance(name, str) for name in value):
            raise TypeError(f"a key is made of named parts, but one is named {list(value)!r}")
        return {name: _canonical(part) for name, part in value.items()}
    if isinstance(value, list | tuple):
        return [_canonical(part) for part in value]
    if isinstance(value, set | frozenset):
        return sorted((_canonical(part) for part in value), key=lambda part: json.dumps(part, sort_keys=True))
    if isinstance(value, np.ndarray):
        if value.dtype.hasobject:
            return {"shape": list(value.shape), "values": _canonical(value.ravel().tolist())}
        plain = np.ascontiguousarray(value.astype(value.dtype.newbyteorder("<")))
        digest = hashlib.sha256(plain.tobytes()).hexdigest()
        return {"dtype": plain.dtype.str, "shape": list(value.shape), "sha256": digest}
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, Path):
        return str(value)
    if value is None or isinstance(value, str | bool | int | float):
        return value
    raise TypeError(f"a key is made of plain values, but one part is a {type(value).__name__}: {value!r}")
