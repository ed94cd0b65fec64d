"""The one place that knows numba.

Compiled code is cached in a folder named by a hash of every kernel source, because numba's own cache keeps
stale code when a callee in another file changes.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

_PACKAGE = Path(__file__).resolve().parents[1]
_COMPILED_FOLDERS = ("kernels", "flow", "explain")


def _cache_folder() -> Path:
    """Return the cache folder that belongs to exactly these sources."""
    digest = hashlib.sha256()
    for folder in _COMPILED_FOLDERS:
        for source in sorted((_PACKAGE / folder).glob("*.py")):
            digest.update(source.name.encode() + source.read_bytes())
    base = os.environ.get("LIMBTELL_CACHE") or os.path.join(
        os.environ.get("XDG_CACHE_HOME") or os.path.expanduser("~/.cache"), "limbtell"
    )
    return Path(base) / digest.hexdigest()[:16]


# numba reads its cache folder once, when it is imported.
os.environ.setdefault("NUMBA_CACHE_DIR", str(_cache_folder()))

import numba  # noqa: E402  (the cache folder has to be set first)

F = TypeVar("F", bound=Callable[..., Any])


# The compiler is given no liberty with arithmetic (`fastmath`). Fused multiply-add alone would take a tenth
# off the dynamics, but where it is used differs between code just compiled and the same code read from the
# cache: a replay would not give the bytes of the live run.
# Division by zero gives inf or nan as in numpy, so that kernels need no exception path.
_OPTIONS: dict[str, Any] = {"cache": True, "error_model": "numpy"}


def kernel(function: F) -> F:
    """Compile `function` to machine code, cached on disk; same bytes in give the same bytes out."""
    compiled: F = numba.njit(**_OPTIONS)(function)
    return compiled


def inlined(function: F) -> F:
    """As `kernel`, and merged into each caller: passing many arrays costs more than short arithmetic."""
    compiled: F = numba.njit(forceinline=True, **_OPTIONS)(function)
    return compiled


def resolved(function: Callable[..., Any], *arguments: Any) -> Callable[..., Any]:
    """Return the machine code of a kernel for arguments of exactly these types, compiling it if need be.

    numba looks at the types of all arguments at every call, which costs 2 µs for each structured array (step:
    10.9 µs, 1.3 µs without). What is returned here does not look: only for arrays that the caller owns.
    """
    if not hasattr(function, "overloads"):
        return function  # compilation is switched off
    signature = tuple(map(numba.typeof, arguments))
    function.compile(signature)  # type: ignore[attr-defined]
    entry: Callable[..., Any] = function.overloads[signature].entry_point
    return entry


def compiled_versions(function: Callable[..., Any]) -> int:
    """Return how many signatures of a kernel have been compiled: more after start-up is a fault."""
    return len(getattr(function, "signatures", ()))
