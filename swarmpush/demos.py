"""The demo scenarios and demo studies that come with the package."""

from __future__ import annotations

from pathlib import Path

DEMOS = ("service_passage", "vibration_duct", "gel_channel", "loading_bay", "bristle_tray")
STUDY_DEMOS = ("crew_and_departure", "heading_and_width")


def demo(name: str) -> Path:
    """Path of a demo scenario, one of `DEMOS`.

    Raises:
        KeyError: when there is no such demo.
    """
    return _find(f"{name}.toml", f"no demo scenario '{name}'")


def study_demo(name: str) -> Path:
    """Path of a demo study, one of `STUDY_DEMOS`.

    Raises:
        KeyError: when there is no such demo.
    """
    return _find(f"studies/{name}.toml", f"no demo study '{name}'")


def _find(place: str, otherwise: str) -> Path:
    package = Path(__file__).parent
    for folder in (package / "scenarios", package.parent / "scenarios"):
        path = folder / place
        if path.is_file():
            return path
    raise KeyError(otherwise)
