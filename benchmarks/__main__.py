"""Every figure of quality, time and memory in one run, as ratios to one yardstick.

    python -m benchmarks [--only NAME ...] [--reduced] [--markdown] [--output FILE.json] [--processes N] [--repeats N]
    python -m benchmarks --profile NAME [--reduced]

U is the median time of `scipy.fft.fft2` and `ifft2` over 8 x 256 x 256 complex64 in one thread, taken before and after
each figure. Exit status 1 when a bar is missed in a full run.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

from threadpoolctl import threadpool_limits

from benchmarks.automatic import AUTOMATIC
from benchmarks.figures import Figure, Row, Run, markdown_table, rows_of, text_table
from benchmarks.general_library import GENERAL_LIBRARY
from benchmarks.jobs import GROWTH, PIPELINE, VOLUME
from benchmarks.machine import facts, yardstick
from benchmarks.memory import JOINT_SERIES, JOINT_VOLUME
from benchmarks.moving import MOVING
from benchmarks.profiling import profile
from benchmarks.quality import BEST_POSSIBLE
from benchmarks.solving import LINES, POINTS
from recon.caution import CAUTION

#: in the order of the table.
FIGURES: tuple[Figure, ...] = (
    LINES,
    POINTS,
    PIPELINE,
    VOLUME,
    JOINT_VOLUME,
    JOINT_SERIES,
    GENERAL_LIBRARY,
    GROWTH,
    AUTOMATIC,
    BEST_POSSIBLE,
    MOVING,
)
BY_NAME = {figure.name: figure for figure in FIGURES}


def measure(figure: Figure, run: Run) -> list[Row]:
    """Return a figure's rows, and say on standard error how long they took and what more they have to say."""
    started = time.perf_counter()
    before = yardstick()
    results = figure.measure(run)
    rows = rows_of(figure, results, (before, yardstick()))
    print(f"{figure.name}: {time.perf_counter() - started:.0f} s", file=sys.stderr, flush=True)
    for result in results:
        if result.text:
            print(result.text, file=sys.stderr, flush=True)
    return rows


def as_json(rows: list[Row], run: Run, seconds: float) -> dict[str, Any]:
    """Return everything that is kept."""
    yardsticks = [value for row in rows for value in row.yardstick_ms]
    return {
        "caution": CAUTION,
        "reduced": run.reduced,
        "machine": facts() | {"yardstick_ms": sum(yardsticks) / len(yardsticks)},
        "wall_seconds": seconds,
        "figures": [row.as_dict() for row in rows],
    }


def parse(arguments: list[str] | None) -> argparse.Namespace:
    """Read the command line."""
    parser = argparse.ArgumentParser(
        prog="python -m benchmarks", description="Figures of quality, time, memory."
    )
    names = list(BY_NAME)
    parser.add_argument(
        "--only", nargs="+", choices=names, default=names, metavar="NAME", help=", ".join(names)
    )
    parser.add_argument("--reduced", action="store_true", help="small sizes; bars do not apply")
    parser.add_argument("--markdown", action="store_true", help="print the table for a document")
    parser.add_argument("--output", type=Path, help="write everything as JSON")
    parser.add_argument(
        "--processes", type=int, default=2, help="cases of the error figures side by side (2)"
    )
    parser.add_argument("--repeats", type=int, help="repeats of each timed figure (as each thinks right)")
    parser.add_argument(
        "--profile", choices=names, metavar="NAME", help="show where a figure's time goes instead"
    )
    return parser.parse_args(arguments)


def main(arguments: list[str] | None = None) -> int:
    """Measure, print the table, keep the results."""
    options = parse(arguments)
    started = time.perf_counter()
    with tempfile.TemporaryDirectory() as folder, threadpool_limits(limits=1, user_api="blas"):
        run = Run(options.reduced, options.repeats, options.processes, Path(folder))
        if options.profile:
            print(profile(BY_NAME[options.profile], run))
            return 0
        rows = [row for figure in FIGURES if figure.name in options.only for row in measure(figure, run)]
    kept = as_json(rows, run, time.perf_counter() - started)
    machine = kept["machine"]
    show = markdown_table if options.markdown else text_table
    print(show(rows, is_judged=not run.reduced))
    print()
    print(
        f"U = {machine['yardstick_ms']:.1f} ms; {machine['architecture']}, {machine['cores']} cores, "
        f"Python {machine['python']}, NumPy {machine['numpy']}, SciPy {machine['scipy']}, numba {machine['numba']}. "
        f"{CAUTION}"
    )
    if run.reduced:
        print("Reduced sizes: the values say only that everything works.")
    if options.output:
        options.output.write_text(json.dumps(kept, indent=2) + "\n")
    return 0 if run.reduced or all(row.is_met for row in rows) else 1


if __name__ == "__main__":
    sys.exit(main())
