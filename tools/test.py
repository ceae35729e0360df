"""Everything a change must pass: format, lint, types, tests and doctests.

    python tools/test.py                  all of it
    python tools/test.py -m "not slow"    with arguments: only pytest, with these arguments

The first call makes the environment `.venv` at the top of the project and installs the project into it.
"""

from __future__ import annotations

import sys
import time

from _environment import SetupError, prepare, run, say

STEPS = {
    "format": ["ruff", "format", "--check", "."],
    "lint": ["ruff", "check", "."],
    "types": ["mypy"],
    "tests": ["pytest", "-n", "auto", "--durations", "10"],
}


def main(arguments: list[str]) -> int:
    """Run all steps, or pytest alone when there are arguments; 0 when all is well."""
    if arguments in (["-h"], ["--help"]):
        print(__doc__)
        return 0
    try:
        prepare("test")
        if arguments:
            return run(["-m", "pytest", *arguments])
        failed = [name for name, step in STEPS.items() if not passes(name, step)]
    except SetupError as error:
        print(error, file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        return 130
    say(f"failed: {', '.join(failed)}" if failed else "all passed")
    return 1 if failed else 0


def passes(name: str, step: list[str]) -> bool:
    """Run one step, with a line before and one after it."""
    say(f"--- {name}: {' '.join(step)}")
    start = time.monotonic()
    code = run(["-m", *step])
    say(f"--- {name} {'passed' if code == 0 else 'FAILED'} in {time.monotonic() - start:.0f} s")
    return code == 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
