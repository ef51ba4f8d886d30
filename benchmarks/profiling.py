"""Where the time of a figure goes: functions by their own time, the compiled kernels among them."""

from __future__ import annotations

import cProfile
import io
import pstats
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from types import ModuleType
from typing import Any

from benchmarks.figures import Figure, Run
from benchmarks.machine import cpu_seconds, yardstick
from recon import kernels
from recon.operators import filters

LINES = 25


def profile(figure: Figure, run: Run) -> str:
    """Return the table of functions, sorted by their own time, and the whole in units of the yardstick.

    The profiler itself makes calls slower; the whole is timed without it.
    """
    work = figure.work(run)
    work()  # compiled, and read from its cache, before the clock starts
    unit = yardstick()
    seconds = cpu_seconds(work, 1)
    recorder = cProfile.Profile(time.process_time)  # other processes do not count
    with ExitStack() as stack:
        for module in (kernels, filters):
            stack.enter_context(visible(module))
        recorder.runcall(work)
    out = io.StringIO()
    pstats.Stats(recorder, stream=out).strip_dirs().sort_stats("tottime").print_stats(LINES)
    return (
        f"{figure.name}: {seconds:.2f} s of CPU time, {seconds / unit:.1f} U (U = {1e3 * unit:.1f} ms)\n"
        + out.getvalue()
    )


@contextmanager
def visible(module: ModuleType) -> Iterator[None]:
    """Let compiled functions of a module show up by name: the profiler sees Python functions alone."""
    compiled = {name: value for name, value in vars(module).items() if hasattr(value, "py_func")}

    def wrapped(name: str, function: Callable[..., Any]) -> Callable[..., Any]:
        scope: dict[str, Any] = {"function": function}
        # a function of its own name, which is what the profiler tells functions apart by
        exec(f"def {name}(*arguments):\n    return function(*arguments)\n", scope)  # noqa: S102
        made: Callable[..., Any] = scope[name]
        return made

    try:
        for name, function in compiled.items():
            setattr(module, name, wrapped(name, function))
        yield
    finally:
        for name, function in compiled.items():
            setattr(module, name, function)
