"""Audit the service passage, from nothing but a Python: `python tools/demo.py [options of swarmpush audit]`.

The first call makes the environment `.venv` at the top of the project and installs the project into it.
"""

from __future__ import annotations

import sys

from _environment import SetupError, prepare, run, say

SCENARIO = "scenarios/service_passage.toml"


def main(arguments: list[str]) -> int:
    """Prepare the environment, run the audit and return its exit code."""
    try:
        prepare()
        say(f"swarmpush audit {' '.join([SCENARIO, *arguments])}")
        return run(["-m", "swarmpush", "audit", SCENARIO, *arguments])
    except SetupError as error:
        print(error, file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        return 130


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
