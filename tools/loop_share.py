"""Measure which share of an audit's time is spent inside the compiled loops of the two worlds.

    python tools/loop_share.py                     all demos
    python tools/loop_share.py service_passage --workers 1

Every call from Python into compiled code is timed, in each thread, after a first audit that compiles and warms up. The
share is that time over the time of the audit times its threads; a thread that waits for the other counts as idle. Run
it on a machine that does nothing else.
"""

from __future__ import annotations

import argparse
import sys
import threading
import time
from collections.abc import Callable
from typing import Any

from numba.core.dispatcher import Dispatcher

import swarmpush
from swarmpush.demos import DEMOS, demo


class Clock:
    """Adds up the time that threads spend inside what it has wrapped."""

    def __init__(self) -> None:
        self.total_s = 0.0
        self._lock = threading.Lock()

    def around(self, function: Callable[..., Any]) -> Callable[..., Any]:
        def timed(*arguments: Any) -> Any:
            begin = time.perf_counter()
            try:
                return function(*arguments)
            finally:
                spent = time.perf_counter() - begin
                with self._lock:
                    self.total_s += spent

        return timed

    def wrap_all(self) -> None:
        """Wrap every compiled function under each name by which a module of ours calls it."""
        modules = [module for name, module in sys.modules.items() if name.startswith("swarmpush")]
        wrapped: dict[int, Callable[..., Any]] = {}
        for module in modules:
            for name, value in list(vars(module).items()):
                if isinstance(value, Dispatcher):
                    setattr(module, name, wrapped.setdefault(id(value), self.around(value)))


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("scenarios", nargs="*", default=list(DEMOS), help="demos; default: all")
    parser.add_argument("--workers", type=int, default=2, help="threads of the audit")
    options = parser.parse_args()
    scenarios = {name: swarmpush.load(demo(name)) for name in options.scenarios}
    for s in scenarios.values():
        swarmpush.audit(s, replicates=2, workers=options.workers)
    clock = Clock()
    clock.wrap_all()
    print("demo               audit s   compiled s   share of its threads' time")
    for name, s in scenarios.items():
        before, begin = clock.total_s, time.perf_counter()
        swarmpush.audit(s, workers=options.workers)
        spent, inside = time.perf_counter() - begin, clock.total_s - before
        print(f"{name:18} {spent:7.1f}   {inside:10.1f}   {inside / spent / options.workers:.1%}", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
