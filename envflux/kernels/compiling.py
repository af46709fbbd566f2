"""How kernels are compiled, and where the compiled code is kept.

Serial and without the GIL: a parallel kernel hangs after a fork and under threads, while threads
above serial kernels do not. Division follows IEEE rules instead of raising, since the check for
zero is an early exit that keeps LLVM from vectorising a loop.
"""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar, cast

import numba

_config: Any = numba.config  # its settings are made at run time: no type checker sees them
Function = TypeVar("Function", bound=Callable[..., Any])

# Reassociation lets sums over rings run in vector registers. Inputs are checked for NaN and
# infinity before they get here, so the kernels may assume there are none.
_VECTORISED = {"nsz", "arcp", "contract", "nnan", "ninf", "reassoc"}


def compiled(function: Function) -> Function:
    """Compile strictly to IEEE rules."""
    return _compile(function, fastmath=False)


def compiled_vectorised(function: Function) -> Function:
    """Compile so that loops of sums vectorise: the order of additions is the compiler's."""
    return _compile(function, fastmath=_VECTORISED)


def _compile(function: Function, *, fastmath: bool | set[str]) -> Function:
    decorate: Callable[[Function], Any] = numba.njit(cache=True, nogil=True, error_model="numpy", fastmath=fastmath)
    return cast(Function, decorate(function))


def _writable(folder: Path) -> bool:
    existing = next(parent for parent in (folder, *folder.parents) if parent.exists())
    return os.access(existing, os.W_OK)


def _keep_cache_somewhere() -> None:
    """Numba refuses to import a cached kernel where it can write neither here nor in the home folder."""
    home_cache = Path(os.environ.get("XDG_CACHE_HOME", "~/.cache")).expanduser()
    if not _config.CACHE_DIR and not _writable(Path(__file__).parent / "__pycache__") and not _writable(home_cache):
        _config.CACHE_DIR = str(Path(tempfile.gettempdir()) / f"envflux-numba-{os.getuid()}")


_keep_cache_somewhere()
