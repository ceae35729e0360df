"""Packages that only looking at runs needs."""

from __future__ import annotations

from importlib import import_module
from importlib.util import find_spec

from swarmpush.output import OutputError

INSTALL = "pip install 'swarmpush[view]'"


def require(*packages: str) -> None:
    """Make sure that packages can be imported.

    Raises:
        OutputError: which names those that are missing, and the command that brings them.
    """
    missing = [name for name in packages if not _is_there(name)]
    if missing:
        raise OutputError(f"this needs packages that are not installed here ({', '.join(missing)}); run: {INSTALL}")


def _is_there(name: str) -> bool:
    if find_spec(name) is None:
        return False
    try:
        import_module(name)
    except ImportError:  # installed, but not in a state to be used
        return False
    return True
