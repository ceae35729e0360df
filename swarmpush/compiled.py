"""The two ways in which this package compiles its inner loops, and where the machine code is kept.

Numba by itself keeps compiled code beside the sources, and notices a change in a function's own file but not in
what that function calls elsewhere. Here it is kept in the user's cache folder under a hash of the
sources of both worlds: it is found again from a read-only installation, and never stale.
"""

from __future__ import annotations

import hashlib
import os
import sys
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import cache
from pathlib import Path
from typing import Any, TypeVar, cast

from numba import config, njit, types
from numba.extending import intrinsic

Function = TypeVar("Function", bound=Callable[..., object])


def _user_cache() -> Path:
    if sys.platform == "win32":
        return Path(os.environ.get("LOCALAPPDATA") or Path.home() / "AppData" / "Local")
    if sys.platform == "darwin":
        return Path.home() / "Library" / "Caches"
    return Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")


def _temporary_cache() -> Path:
    return Path(tempfile.gettempdir())


@cache
def code_folder() -> Path:
    """Where compiled code is kept: the user's cache folder, or a temporary one if that cannot be written."""
    package = Path(__file__).parent
    digest = hashlib.sha256()
    for folder in (package, package / "kinematics", package / "dynamics"):
        for source in sorted(folder.glob("*.py")):
            digest.update(source.read_bytes())
    for parent in (_user_cache, _temporary_cache):
        try:
            folder = parent() / "swarmpush" / digest.hexdigest()[:16]
            folder.mkdir(parents=True, exist_ok=True)
            with tempfile.TemporaryFile(dir=folder):
                return folder
        except (OSError, RuntimeError):  # RuntimeError: the user has no home
            continue
    return Path(tempfile.mkdtemp(prefix="swarmpush-"))


def is_first_start() -> bool:
    """Whether nothing has been compiled yet, so that the first use will take its time."""
    return not any(Path(config.CACHE_DIR or code_folder()).rglob("*.nbc"))


@contextmanager
def own_cache() -> Iterator[None]:
    """Functions decorated inside keep their machine code in `code_folder`, unless the user named another place."""
    before = config.CACHE_DIR
    config.CACHE_DIR = before or str(code_folder())
    try:
        yield
    finally:
        config.CACHE_DIR = before


def compiled(function: Function) -> Function:
    """Compile on first call, release Python's lock while running, and follow IEEE rules on division by zero."""
    with own_cache():
        return cast(Function, njit(cache=True, nogil=True, error_model="numpy")(function))


def inlined(function: Function) -> Function:
    """The same for a part of a hot loop: its code goes into each caller, which spares the passing of many arrays."""
    with own_cache():
        return cast(Function, njit(cache=True, nogil=True, error_model="numpy", forceinline=True)(function))


@intrinsic
def borrowed(typingctx: Any, value: Any) -> Any:
    """In compiled code: the same array, or tuple of arrays, without a share in their ownership.

    Each array that a compiled function is given, or takes out of a tuple, costs an atomic count up and one down, which
    shows at millions of calls per second. A borrowed array is not counted, so it must not outlive the function that
    borrowed it, its owner must surely live as long, and what the function itself has made must not be borrowed.
    """

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return _disowned(context, builder, signature.args[0], args[0])

    return value(value), codegen


def _disowned(context: Any, builder: Any, kind: Any, value: Any) -> Any:
    if isinstance(kind, types.Array):
        view = context.make_array(kind)(context, builder, value)
        view.meminfo = view.meminfo.type(None)
        return view._getvalue()
    if isinstance(kind, types.BaseTuple):
        parts = enumerate(kind.types)
        return context.make_tuple(
            builder, kind, [_disowned(context, builder, part, builder.extract_value(value, k)) for k, part in parts]
        )
    return value
