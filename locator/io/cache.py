"""Results of stages on disk, read back while inputs, settings, code and libraries are unchanged.

A result is stored as one zip file without pickle: the numbers as plain arrays, the rest as JSON.
"""

from __future__ import annotations

import ast
import hashlib
import importlib
import importlib.metadata
import importlib.util
import json
import logging
import os
import platform
import zipfile
from collections.abc import Callable, Mapping
from dataclasses import fields, is_dataclass
from functools import cache
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.lib import format as npy

from locator.io.files import write_whole
from locator.results import Frozen

logger = logging.getLogger(__name__)

SCHEMA = 1
"""Raised when the form of the stored files changes."""

BUDGET_BYTES = 4 << 30
"""Past this the entries that were used longest ago are removed; a choice, no source."""

LIBRARIES = ("numpy", "scipy", "numba", "scikit-image", "mne", "pyamg", "nibabel")
"""Libraries whose version is part of every key."""


# ── values to JSON and arrays, and back ──────────────────────────────────────────────────


def encode(value: Any, arrays: dict[str, np.ndarray]) -> Any:
    """Turn a result into plain JSON, putting its arrays aside.

    Parameters
    ----------
    value : object
        None, bool, int, float, str, tuple, list, mapping, array, NumPy scalar, or a dataclass
        of this package holding such values.
    arrays : dict
        Filled with the arrays, by the names that the JSON refers to.

    Returns
    -------
    object
        What `json.dumps` takes.

    Raises
    ------
    TypeError
        If the value is of another kind.
    """
    if value is None or isinstance(value, bool | int | float | str):
        if not isinstance(value, np.generic):
            return value
    if isinstance(value, np.generic):
        return {"scalar": encode(np.asarray(value), arrays)}
    if isinstance(value, np.ndarray):
        if value.dtype.hasobject:
            raise TypeError("arrays of objects are not stored")
        name = f"a{len(arrays)}"
        arrays[name] = value
        return {"array": name}
    if isinstance(value, tuple):
        return {"tuple": [encode(item, arrays) for item in value]}
    if isinstance(value, list):
        return {"list": [encode(item, arrays) for item in value]}
    if isinstance(value, Mapping):
        return {"map": [[encode(k, arrays), encode(v, arrays)] for k, v in value.items()]}
    if is_dataclass(value) and not isinstance(value, type):
        kind = type(value)
        inside = {f.name: encode(getattr(value, f.name), arrays) for f in fields(value) if f.init}
        return {"class": f"{kind.__module__}:{kind.__qualname__}", "fields": inside}
    msg = f"values of type {type(value).__name__} are not stored"
    raise TypeError(msg)


def decode(tree: Any, arrays: Mapping[str, np.ndarray]) -> Any:
    """Undo `encode`.

    Raises
    ------
    ValueError
        If the JSON is not what `encode` makes, or names a class outside this package.
    """
    if not isinstance(tree, dict):
        return tree
    if "array" in tree:
        return arrays[tree["array"]]
    if "scalar" in tree:
        return decode(tree["scalar"], arrays)[()]
    if "tuple" in tree:
        return tuple(decode(item, arrays) for item in tree["tuple"])
    if "list" in tree:
        return [decode(item, arrays) for item in tree["list"]]
    if "map" in tree:
        return {decode(key, arrays): decode(item, arrays) for key, item in tree["map"]}
    if "class" in tree:
        module, _, name = tree["class"].partition(":")
        if module.split(".")[0] != "locator":
            msg = f"{tree['class']} is no class of this package"
            raise ValueError(msg)
        kind: Any = getattr(importlib.import_module(module), name)
        if not (isinstance(kind, type) and is_dataclass(kind)):
            msg = f"{tree['class']} is no record"
            raise ValueError(msg)
        build: Any = kind
        return build(**{key: decode(item, arrays) for key, item in tree["fields"].items()})
    msg = f"unknown entry {sorted(tree)}"
    raise ValueError(msg)


def store(path: Path, value: Any) -> None:
    """Write a result whole, the same value always as the same bytes."""
    arrays: dict[str, np.ndarray] = {}
    text = json.dumps({"schema": SCHEMA, "value": encode(value, arrays)})

    def write(part: Path) -> None:
        with zipfile.ZipFile(part, "w", zipfile.ZIP_STORED, allowZip64=True) as packed:
            with packed.open(zipfile.ZipInfo("value.json"), "w") as member:
                member.write(text.encode("utf-8"))
            for name, array in arrays.items():
                with packed.open(zipfile.ZipInfo(f"{name}.npy"), "w", force_zip64=True) as member:
                    npy.write_array(member, np.asarray(array), allow_pickle=False)

    write_whole(path, write)


def load(path: Path) -> Any:
    """Read a result that `store` wrote.

    Raises
    ------
    ValueError
        If the file is absent, damaged, or of another schema.
    """
    try:
        with zipfile.ZipFile(path) as packed:
            tree = json.loads(packed.read("value.json"))
            if tree.get("schema") != SCHEMA:
                msg = f"{path} is of schema {tree.get('schema')}, not {SCHEMA}"
                raise ValueError(msg)
            arrays = {}
            for name in packed.namelist():
                if name.endswith(".npy"):
                    with packed.open(name) as member:
                        array = npy.read_array(member, allow_pickle=False)
                    array.flags.writeable = False
                    arrays[name.removesuffix(".npy")] = array
        return decode(tree["value"], arrays)
    except (OSError, zipfile.BadZipFile, KeyError, AttributeError, TypeError, EOFError) as error:
        msg = f"{path} cannot be read back: {error}"
        raise ValueError(msg) from error


# ── keys ─────────────────────────────────────────────────────────────────────────────────


def digest_of(value: Any) -> str:
    """SHA-256 of a value of the kinds that `encode` takes, or of a random generator's state."""
    if isinstance(value, np.random.Generator):
        state = json.dumps(value.bit_generator.state, sort_keys=True, default=str)
        return hashlib.sha256(b"generator" + state.encode()).hexdigest()
    arrays: dict[str, np.ndarray] = {}
    digest = hashlib.sha256(json.dumps(encode(value, arrays), sort_keys=True).encode())
    for name, array in arrays.items():
        digest.update(f"{name}{array.dtype.str}{array.shape}".encode())
        digest.update(np.ascontiguousarray(array).data)
    return digest.hexdigest()


def _source_file(module: str) -> Path | None:
    try:
        found = importlib.util.find_spec(module)
    except (ImportError, ValueError):
        return None
    if found is None or found.origin is None or not found.origin.endswith(".py"):
        return None
    return Path(found.origin)


@cache
def modules_behind(module: str) -> tuple[str, ...]:
    """Names of all modules of this package that a module's code depends on, itself included.

    Found by reading the import statements, wherever in the source they stand.

    Examples
    --------
    >>> "locator.geometry" in modules_behind("locator.volume")
    True
    >>> "locator.cli" in modules_behind("locator.volume")
    False
    """
    package = module.split(".")[0]
    seen: set[str] = set()
    todo = [module]
    while todo:
        name = todo.pop()
        if name in seen:
            continue
        source = _source_file(name)
        if source is None:
            continue
        seen.add(name)
        for node in ast.walk(ast.parse(source.read_bytes())):
            if isinstance(node, ast.Import):
                named = [alias.name for alias in node.names]
            elif isinstance(node, ast.ImportFrom) and node.level == 0 and node.module:
                named = [node.module, *(f"{node.module}.{alias.name}" for alias in node.names)]
            else:
                continue
            todo += [n for n in named if n.split(".")[0] == package and n != package]
    return tuple(sorted(seen))


@cache
def code_digest(module: str) -> str:
    """SHA-256 over the source of everything that a module's code depends on in this package."""
    digest = hashlib.sha256()
    for name in modules_behind(module):
        source = _source_file(name)
        if source is not None:
            digest.update(name.encode() + b"\0" + source.read_bytes() + b"\0")
    return digest.hexdigest()


@cache
def library_versions() -> Mapping[str, str]:
    """Versions of Python and of the libraries that numbers can depend on."""
    versions = {"python": platform.python_version()}
    for name in LIBRARIES:
        try:
            versions[name] = importlib.metadata.version(name)
        except importlib.metadata.PackageNotFoundError:
            versions[name] = "absent"
    return MappingProxyType(versions)


class StageCache:
    """The stored stages of one output folder.

    Parameters
    ----------
    folder : Path
        Where the entries lie; made when the first one is written.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._known: dict[int, tuple[Any, str]] = {}
        self._files: dict[str, str] = {}

    def key(self, stage: str, function: Callable[..., Any], args: Any, kwargs: Any) -> str:
        """Return the key of one call: stage, code, library versions, and every argument.

        An argument called ``progress`` is left out. A result of an earlier stage of this cache
        stands for itself by its own key, so that large arrays are not hashed twice.
        """
        parts = {
            "schema": SCHEMA,
            "stage": stage,
            "function": f"{function.__module__}:{function.__qualname__}",
            "code": code_digest(function.__module__),
            "versions": dict(library_versions()),
            "args": [self._digest(value) for value in args],
            "kwargs": {k: self._digest(v) for k, v in kwargs.items() if k != "progress"},
        }
        return hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()

    def _digest(self, value: Any) -> str:
        known = self._known.get(id(value))
        if known is not None and known[0] is value:
            return known[1]
        if isinstance(value, tuple):
            inside = json.dumps([self._digest(item) for item in value])
            return hashlib.sha256(b"tuple" + inside.encode()).hexdigest()
        digest = digest_of(value)
        if isinstance(value, Frozen):
            self._known[id(value)] = (value, digest)
        return digest

    def path(self, stage: str, key: str) -> Path:
        """File name of an entry."""
        return self.folder / f"{stage.replace(' ', '_')}-{key[:32]}.zip"

    def file_of(self, value: Any) -> str | None:
        """File name of the entry that a value was read from, None for any other value."""
        known = self._known.get(id(value))
        return self._files.get(known[1]) if known is not None and known[0] is value else None

    def get(self, stage: str, key: str) -> Any:
        """Return the stored result, or None when there is none that can be read."""
        path = self.path(stage, key)
        if not path.is_file():
            return None
        try:
            value = load(path)
        except ValueError as error:
            logger.warning("stage %s is computed again: %s", stage, error)
            path.unlink(missing_ok=True)
            return None
        os.utime(path)
        self._files[key] = path.name
        self._known[id(value)] = (value, key)
        return value

    def put(self, stage: str, key: str, value: Any) -> None:
        """Store a result."""
        store(self.path(stage, key), value)

    def prune(self, keep: set[str], budget_bytes: int = BUDGET_BYTES) -> None:
        """Remove what was used longest ago until the rest fits the budget.

        Parameters
        ----------
        keep : set of str
            File names that stay in any case.
        budget_bytes : int
        """
        entries = [(p.stat().st_mtime, p.stat().st_size, p) for p in self.folder.glob("*.zip")]
        total = sum(size for _, size, _ in entries)
        for _, size, path in sorted(entries):
            if total <= budget_bytes:
                return
            if path.name not in keep:
                path.unlink(missing_ok=True)
                total -= size
