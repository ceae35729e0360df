"""The demo scenarios that come with the package."""

from __future__ import annotations

from pathlib import Path

DEMOS = ("service_passage", "vibration_duct", "gel_channel", "loading_bay", "bristle_tray")


def demo(name: str) -> Path:
    """Path of a demo scenario, one of `DEMOS`.

    Raises:
        KeyError: when there is no such demo.
    """
    package = Path(__file__).parent
    for folder in (package / "scenarios", package.parent / "scenarios"):
        path = folder / f"{name}.toml"
        if path.is_file():
            return path
    raise KeyError(f"no demo scenario '{name}'")
