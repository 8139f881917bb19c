"""Traced tables on disk: keyed by everything that determines them, written whole, verified on reading, bounded in size.

A file is one line of JSON (format, key, shapes, method, rays, seed, SHA-256 of these and of the arrays) and then the
arrays, little-endian float64 in C order. A file that is damaged, cut short, or not ours is left unused with a warning.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import time
import warnings
from pathlib import Path

import numpy as np

from raytrace.errors import CacheWarning
from raytrace.files import write_atomic
from raytrace.jit import cache_root
from raytrace.optics.table import ScatteringTable

FORMAT = "raytrace scattering table 3"
SUFFIX = ".table"
LIMIT_BYTES = 2 * 1024**3
_ARRAYS = (
    "phase_sr",
    "standard_error_sr",
    "angle_edges_deg",
    "wavelength_nm",
    "index_n",
    "index_k",
    "left_over",
    "absorbed",
    "aureole_sr",
    "glory_sr",
)
_MAY_LACK = ("wavelength_nm", "aureole_sr", "glory_sr")
_PLAIN = ("method", "rays", "seed", "sizes", "size_error")
# what these say changes no table
_NO_SOURCES = ("__init__.py", "cache.py", "scattering.py")
_MORE_SOURCES = ("../random_stream.py", "../drops/bow_angle.py", "../drops/spectrum.py", "../data/optics_methods.csv")


def table_cache_folder() -> Path | None:
    """Folder of the tables; None where it can neither be read nor made."""
    folder = cache_root() / "tables"
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError:
        return None
    return folder


def table_cache_size() -> tuple[int, int]:
    """Number of tables on disk and the bytes that they take."""
    folder = table_cache_folder()
    sizes = [_size(path) for path in folder.glob("*" + SUFFIX)] if folder else []
    return len(sizes), sum(sizes)


def table_key(**determines) -> str:
    """Hash of everything that determines a table: the arguments, and the sources of the optics."""
    digest = hashlib.sha256(FORMAT.encode())
    here = Path(__file__).parent
    own = sorted(path for path in here.glob("*.py") if path.name not in _NO_SOURCES)
    for path in [*own, *(here / name for name in _MORE_SOURCES)]:
        digest.update(path.read_bytes())
    for name in sorted(determines):
        value = determines[name]
        digest.update(f"|{name}=".encode())
        digest.update(np.ascontiguousarray(value).tobytes() if isinstance(value, np.ndarray) else repr(value).encode())
    return digest.hexdigest()


def path_of(key: str) -> Path | None:
    """File of a key; None without a folder."""
    folder = table_cache_folder()
    return folder / (key[:40] + SUFFIX) if folder else None


def load(key: str) -> ScatteringTable | None:
    """The table of a key, or None where there is none or it cannot be trusted."""
    path = path_of(key)
    try:
        if path is None or not path.is_file():
            return None
        with path.open("rb") as file:
            head = json.loads(file.readline(65_536))
            if head["format"] != FORMAT or head["key"] != key:
                raise ValueError("it belongs to something else")
            shapes = {name: tuple(head["shapes"][name]) for name in _ARRAYS if name in head["shapes"]}
            count = {name: int(np.prod(shape)) for name, shape in shapes.items()}
            if sum(count.values()) * 8 != _size(path) - file.tell():
                raise ValueError("it is cut short")
            data = np.fromfile(file, dtype="<f8")
        if _digest(head, [data]) != head["sha256"]:
            raise ValueError("its checksum does not hold")
        arrays, at = {}, 0
        for name, shape in shapes.items():
            arrays[name] = data[at : at + count[name]].reshape(shape)
            at += count[name]
        with contextlib.suppress(OSError):  # a cache that can be read but not written is good to read
            os.utime(path)  # last use, for the bound on size
        index = arrays.pop("index_n") + 1j * arrays.pop("index_k")
        arrays = dict.fromkeys(_MAY_LACK) | arrays
        return ScatteringTable(**arrays, index=index, **{name: head[name] for name in _PLAIN})
    except (OSError, ValueError, KeyError, TypeError, MemoryError, RecursionError) as problem:
        warnings.warn(
            f"cache file {path.name} is left unused: {problem}; the table is made anew", CacheWarning, stacklevel=2
        )
        return None


def store(key: str, table: ScatteringTable) -> None:
    """Keep a table; a full disk or a folder that cannot be written is a warning, never an error."""
    path = path_of(key)
    if path is None:
        return
    parts = {name: getattr(table, name, None) for name in _ARRAYS}
    parts["index_n"], parts["index_k"] = table.index.real, table.index.imag
    parts = {name: np.ascontiguousarray(value, dtype="<f8") for name, value in parts.items() if value is not None}
    head = {
        "format": FORMAT,
        "key": key,
        "shapes": {name: value.shape for name, value in parts.items()},
        **{name: getattr(table, name) for name in _PLAIN},
    }
    head["sha256"] = _digest(head, parts.values())

    def write(file):
        file.write(json.dumps(head).encode() + b"\n")
        for value in parts.values():
            file.write(value.data)

    try:
        write_atomic(path, write)
        _bound(path)
    except OSError as problem:
        warnings.warn(f"the table could not be kept in {path.parent}: {problem}", CacheWarning, stacklevel=2)


def _digest(head: dict, arrays) -> str:
    """Checksum of the arrays and of what the first line says, but for the checksum itself."""
    said = {name: value for name, value in head.items() if name != "sha256"}
    digest = hashlib.sha256(json.dumps(said, sort_keys=True).encode())
    for value in arrays:
        digest.update(value)
    return digest.hexdigest()


def _bound(newest: Path) -> None:
    """Drop the tables used longest ago until the folder is within its limit; the newest stays."""
    files = sorted((p for p in newest.parent.glob("*" + SUFFIX) if p != newest), key=_last_use)
    total = _size(newest) + sum(_size(p) for p in files)
    for path in files:
        if total <= LIMIT_BYTES:
            break
        total -= _size(path)
        path.unlink(missing_ok=True)
    # what a killed process left half written; a living one is done within the hour
    for part in newest.parent.glob(".*.part"):
        if _last_use(part) < time.time() - 3600:
            part.unlink(missing_ok=True)


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except OSError:
        return 0


def _last_use(path: Path) -> float:
    try:
        return path.stat().st_mtime
    except OSError:
        return 0.0
