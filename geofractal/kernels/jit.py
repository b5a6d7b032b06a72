"""The one door to the compiler: every kernel is compiled without the interpreter lock and cached."""

from __future__ import annotations

import hashlib
import os
import pickle
import tempfile
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any, TypeVar, cast

import numba
from numba.core import config as _config

numba_config: Any = _config  # its settings exist only at run time

F = TypeVar("F", bound=Callable[..., Any])


@cache
def sources_digest() -> str:
    """Return a hash of every kernel's source: part of the content key and of the cache folder's name."""
    digest = hashlib.blake2b(digest_size=8)
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.read_bytes())
    return digest.hexdigest()


@cache
def _cache_folder() -> str | None:
    """Return a writable folder named by the kernels' sources, or None where there is none.

    A cached kernel does not notice that a function it calls in another module has changed, so
    any change of any kernel starts a new folder.
    """
    homes = [os.environ.get("XDG_CACHE_HOME"), str(Path("~/.cache").expanduser()), tempfile.gettempdir()]
    for home in filter(None, homes):
        folder = Path(home) / "geofractal" / f"kernels-{sources_digest()}"
        try:
            folder.mkdir(parents=True, exist_ok=True)
            with tempfile.TemporaryFile(dir=folder):
                return str(folder)
        except OSError:
            continue
    return None


def kernel(function: F) -> F:
    """Compile `function` on its first call, without the interpreter lock, and keep the machine code.

    The interpreted twin stays at ``.py_func``, which the tests compare with the compiled code.
    """
    folder = _cache_folder()
    if folder is None:
        return cast("F", numba.njit(nogil=True)(function))
    before = numba_config.CACHE_DIR
    numba_config.CACHE_DIR = folder
    try:
        compiled: Any = numba.njit(nogil=True, cache=True)(function)
    finally:
        numba_config.CACHE_DIR = before
    _heal(compiled)
    return cast("F", compiled)


def _heal(compiled: Any) -> None:
    """Compile anew where a killed process left a truncated cache file, which numba would raise on."""
    load = compiled._cache.load_overload  # noqa: SLF001 - numba has no public hook for a broken cache

    def load_or_flush(signature: Any, target: Any) -> Any:
        try:
            return load(signature, target)
        except (EOFError, pickle.UnpicklingError, OSError, ValueError, IndexError):
            compiled._cache.flush()  # noqa: SLF001 - as above
            return None

    compiled._cache.load_overload = load_or_flush  # noqa: SLF001 - as above
