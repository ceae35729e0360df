"""Count how often an audit's verdicts name the one fault of a rig first, and how often they find one where is none.

    python tools/known_faults.py              100 cases of each rig
    python tools/known_faults.py --cases 20

The rigs are those of `tests/unit/faulty_rigs.py`. Exit code: 0 if in each faulty rig at least 95 of 100 cases have its
fault heading the list of failures, and in each sound one at most 5 of 100 have any failure; else 1.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from pathlib import Path

PROJECT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(PROJECT / "tests" / "unit"))

RIGHT = 0.95  # share of the cases


def main() -> int:
    from faulty_rigs import FAULTY, SOUND, findings

    from swarmpush.auditing.verdicts import most_failed

    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--cases", type=int, default=100)
    n_cases = parser.parse_args().cases
    is_good = True
    for name in (*SOUND, *FAULTY):
        expected = None if name in SOUND else name
        firsts: Counter[str | None] = Counter()
        others: Counter[str] = Counter()
        for case in range(n_cases):
            failed = [finding.assumption for finding in most_failed(findings(name, case))]
            firsts[failed[0] if failed else None] += 1
            others.update(failed[1:])
        is_good &= firsts[expected] >= RIGHT * n_cases
        print(
            f"{name:20} right in {firsts[expected]} of {n_cases}; first: {dict(firsts)}; then: {dict(others)}",
            flush=True,
        )
    return 0 if is_good else 1


if __name__ == "__main__":
    sys.exit(main())
