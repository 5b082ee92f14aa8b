"""The decorator of every compiled kernel, and where the compiled code is kept.

numba decides by a function's own file whether its stored code is still good; a change in a kernel that
it calls goes unnoticed. The stored code is therefore kept in a folder named after a hash over the
sources of all kernels, below the user's cache folder (``XDG_CACHE_HOME`` or ``~/.cache``). Where that
cannot be written the code is compiled anew in each process.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import numba

Function = TypeVar("Function", bound=Callable[..., Any])

_PACKAGE = Path(__file__).resolve().parent.parent
_KERNEL_FOLDERS = ("flow", "nose")


def _source_hash() -> str:
    digest = hashlib.sha256(numba.__version__.encode())
    for folder in _KERNEL_FOLDERS:
        for path in sorted((_PACKAGE / folder).glob("*.py")):
            digest.update(path.name.encode())
            digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def _cache_folder() -> Path | None:
    home = os.environ.get("XDG_CACHE_HOME") or os.path.join(os.path.expanduser("~"), ".cache")
    folder = Path(home) / "compsize" / f"kernels-{_source_hash()}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        probe = folder / f".probe-{os.getpid()}"
        probe.write_bytes(b"")
        probe.unlink()
    except OSError:
        return None
    return folder


CACHE_FOLDER = _cache_folder()


def compiled_before() -> bool:
    """Whether this machine has stored code of these very kernels (else the first use compiles)."""
    return CACHE_FOLDER is not None and any(CACHE_FOLDER.rglob("*.nbi"))


def kernel(function: Function) -> Function:
    """Compile ``function`` without the interpreter, lock released, division by zero as in IEEE 754."""
    options: dict[str, Any] = {"nogil": True, "error_model": "numpy", "fastmath": {"contract"}}
    if CACHE_FOLDER is None:
        return numba.njit(**options)(function)
    config: Any = numba.config
    before = config.CACHE_DIR
    config.CACHE_DIR = str(CACHE_FOLDER)
    try:
        return numba.njit(cache=True, **options)(function)
    finally:
        config.CACHE_DIR = before
