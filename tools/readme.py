"""Regenerate what README.md quotes: the demo's answer, its pictures and the reference of scenario keys.

    python tools/readme.py            rewrite README.md and the pictures beside this file
    python tools/readme.py --check    only say whether the reference of scenario keys is up to date

Run it with a Python that has the project installed, e.g. the one in .venv.
"""

from __future__ import annotations

import math
import os
import re
import subprocess
import sys
import tempfile
import types
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Any, Literal, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo
from pydantic_core import PydanticUndefined

from swarmpush import routine, scenario
from swarmpush.quantities import Quantity
from swarmpush.scenario import Scenario

PROJECT = Path(__file__).resolve().parent.parent
PICTURES = PROJECT / "tools" / "pictures"
DEMO = "scenarios/service_passage.toml"
WIDTH = "100"  # columns of the quoted console output
FILM_S = 16.0  # of model time: some three laps


def main(arguments: list[str]) -> int:
    """Rewrite the README's generated parts; with --check, compare the reference only."""
    readme = PROJECT / "README.md"
    text = readme.read_text(encoding="utf-8")
    with_reference = replace_part(text, "reference", reference())
    if arguments == ["--check"]:
        return 0 if with_reference == text else 1
    with tempfile.TemporaryDirectory() as folder:
        results = Path(folder) / "results"
        with_answer = replace_part(with_reference, "answer", f"```text\n{demo_output(results)}\n```")
        draw_pictures(results)
    readme.write_text(with_answer, encoding="utf-8")
    return 0


def replace_part(text: str, name: str, part: str) -> str:
    """Put `part` between the marks of that name."""
    begin, end = f"<!-- generated: {name} -->", "<!-- end -->"
    pattern = re.compile(rf"({re.escape(begin)}\n).*?({re.escape(end)})", re.DOTALL)
    if not pattern.search(text):
        raise SystemExit(f"README.md has no part marked {begin}")
    return pattern.sub(lambda match: f"{match[1]}{part}\n{match[2]}", text)


def demo_output(results: Path) -> str:
    """What the demo prints, without the place of the report."""
    done = subprocess.run(
        [sys.executable, "-m", "swarmpush", "audit", DEMO, "--out", str(results)],
        cwd=PROJECT,
        env=os.environ | {"COLUMNS": WIDTH, "NO_COLOR": "1"},
        capture_output=True,
        text=True,
        check=True,
    )
    lines = [line.rstrip() for line in done.stdout.strip().splitlines()]
    return "\n".join(line for line in lines if not line.startswith("report:"))


def draw_pictures(results: Path) -> None:
    """The pictures of the README, and its film."""
    from swarmpush.auditing.audit import load_audit
    from swarmpush.reporting.audit_drawing import ladder
    from swarmpush.reporting.drawing import as_png
    from swarmpush.reporting.run_drawing import lap_over_runs

    audit = load_audit(results)
    PICTURES.mkdir(exist_ok=True)
    (PICTURES / "lap.png").write_bytes(as_png(lap_over_runs, audit.plan, audit.sample, dpi=110))
    (PICTURES / "ladder.png").write_bytes(as_png(ladder, audit, dpi=110))
    _film(audit.scenario, audit.sample.seed, audit.sample.strikes["t_on_s"].median())


def _film(s: Scenario, seed: int, about_s: float) -> None:
    """The window's picture just after a strike, and a short film round it."""
    from swarmpush.viewing.film import record
    from swarmpush.viewing.to_file import export_film

    film = record(s, seed)
    strike_s = float(film.strikes(about_s, film.duration_s)["t_on_s"].iloc[0])
    export_film(film, PICTURES / "watch.png", size=(1100, 620), at_s=strike_s + 0.05)
    span = (strike_s - FILM_S / 2, strike_s + FILM_S / 2)
    export_film(film, PICTURES / "watch.gif", size=(640, 240), span_s=span, fps=12, speed=2.0)


def reference() -> str:
    """All tables and keys of a scenario file, from the model itself."""
    parts: list[str] = []
    shown: dict[type[BaseModel], str] = {}
    for name, field in Scenario.model_fields.items():
        is_list = get_origin(field.annotation) is tuple
        for model in _models(field.annotation):
            if model is routine.Routine:
                continue
            if model in shown:  # keys of a table that stands above
                words = field.description or ""
                parts.append(f"**[[{name}]]** {words[:1].upper()}{words[1:]}. Keys as in [{shown[model]}].")
                continue
            shown[model] = name
            heading = f"[[{name}]]" if is_list else f"[{name}]"
            parts.append(f"**{heading}** {_first(model)}\n\n{_key_table(model)}")
    acts = [model for model in _models(routine.Act) if model is not routine.Branch]
    parts.append(f"**[[routine.stages]]** {_first(routine.Stage)}\n\n{_key_table(routine.Stage)}")
    parts += [f'**act = "{_tag(act)}"** {_first(act)}\n\n{_key_table(act)}' for act in acts]
    return "\n\n".join(parts)


def _first(model: type[BaseModel]) -> str:
    return " ".join((model.__doc__ or "").split())


def _tag(act: type[BaseModel]) -> str:
    return str(get_args(act.model_fields["act"].annotation)[0])


def _models(annotation: Any) -> Iterator[type[BaseModel]]:
    """The models in an annotation such as `A | None` or `Annotated[A | B, ...]`."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        yield annotation
    elif get_origin(annotation) is Annotated:
        yield from _models(get_args(annotation)[0])
    elif isinstance(annotation, types.UnionType) or get_origin(annotation) is not None:
        for part in get_args(annotation):
            yield from _models(part)


def _key_table(model: type[BaseModel]) -> str:
    rows = ["| key | unit or values | default | allowed | meaning |", "| --- | --- | --- | --- | --- |"]
    for key, field in model.model_fields.items():
        if key != "act":
            rows.append(
                f"| `{key}` | {_kind(field)} | {_default(field)} | {_range(field)} | {field.description or ''} |"
            )
    return "\n".join(rows) if len(rows) > 2 else "No keys."


def _kind(field: FieldInfo) -> str:
    if points := _points(field):
        return points
    if quantity := _quantity(field):
        return "ratio" if quantity.si_unit == "1" else quantity.si_unit
    if get_origin(field.annotation) is Literal:
        return ", ".join(f"`{value}`" for value in get_args(field.annotation))
    models = list(_models(field.annotation))
    if models:
        keys = ", ".join(models[0].model_fields)
        is_list = any(get_origin(part) is tuple for part in (field.annotation, *_parts(field.annotation)))
        return "list of acts" if models[0] is routine.Run else f"list of {{ {keys} }}" if is_list else f"{{ {keys} }}"
    kinds = {bool: "true or false", int: "whole number"}
    plain = {get_args(part)[0] if get_origin(part) is Annotated else part for part in _parts(field.annotation)}
    return next((word for kind, word in kinds.items() if field.annotation is kind or kind in plain), "text")


def _points(field: FieldInfo) -> str:
    """What a key that holds places consists of; empty for any other."""

    def holds(annotation: Any, kind: Any) -> bool:
        return annotation == kind or any(holds(part, kind) for part in get_args(annotation))

    if not holds(field.annotation, scenario.Point):
        return ""
    corners = [*field.metadata, field.annotation, *get_args(field.annotation)]
    is_outline = any(holds(part, tuple[scenario.Point, ...]) for part in corners)
    if is_outline and get_origin(field.annotation) is tuple:
        return "list of lists of [x, y] in m"
    return "list of [x, y] in m" if is_outline else "[x, y] in m"


def _quantity(field: FieldInfo) -> Quantity | None:
    marks = [mark for part in _parts(field.annotation) for mark in getattr(part, "__metadata__", ())]
    return next((mark for mark in (*field.metadata, *marks) if isinstance(mark, Quantity)), None)


def _parts(annotation: Any) -> tuple[Any, ...]:
    return get_args(annotation) if isinstance(annotation, types.UnionType) or get_origin(annotation) else ()


def _default(field: FieldInfo) -> str:
    if field.default is PydanticUndefined:
        return "required"
    if field.default is None or field.default == ():
        return ""
    if isinstance(field.default, float):
        return _number(field.default, field)
    return str(field.default).lower()


def _number(value: float, field: FieldInfo) -> str:
    """A limit or default as a person would write it: angles in degrees."""
    quantity = _quantity(field)
    if quantity and quantity.si_unit == "rad" and value:
        return f"{math.degrees(value):.4g} deg"
    return f"{value:.4g}"


def _range(field: FieldInfo) -> str:
    signs = {"ge": "&ge;", "gt": "&gt;", "le": "&le;", "lt": "&lt;"}
    limits = [
        f"{sign} {_number(getattr(mark, name), field)}"
        for mark in field.metadata
        for name, sign in signs.items()
        if isinstance(getattr(mark, name, None), int | float)
    ]
    return ", ".join(limits)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
