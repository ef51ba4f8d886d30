"""The one command measures every figure, and its parts do what they say."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import benchmarks.__main__ as command
from benchmarks.figures import Bar, Figure, Result, Row, Run, markdown_table, rows_of, text_table
from benchmarks.general_library import Rival, Wrapped, objective, run_rival
from benchmarks.moving import KINDS, Motion, simulate_series
from benchmarks.process import idle_bytes, run_job
from benchmarks.search import Grid, best_of, side_by_side
from benchmarks.solving import iterations_to
from recon.caution import CAUTION
from recon.solver import solve
from tests.recon.helpers import complex_normal
from tests.recon.test_solver import small_problem

TIME = Bar("time", "time of a thing", "U", 10, 5)
FACTOR = Bar("factor", "times faster", "x", 20, 50, at_least=True)


def test_every_figure_is_measured_in_small(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The smoke run of the whole command: every number of the table, finite, kept with the facts of the machine."""
    output = tmp_path / "figures.json"
    assert command.main(["--reduced", "--processes", "1", "--output", str(output)]) == 0
    kept = json.loads(output.read_text())
    names = [bar.name for figure in command.FIGURES for bar in figure.bars]
    assert [row["name"] for row in kept["figures"]] == names
    assert all(np.isfinite(row["value"]) and row["value"] > 0 for row in kept["figures"])
    assert kept["caution"] == CAUTION
    machine = {"architecture", "cores", "system", "python", "numpy", "scipy", "numba", "yardstick_ms"}
    assert set(kept["machine"]) == machine
    shown = capsys.readouterr().out
    assert all(bar.what in shown for figure in command.FIGURES for bar in figure.bars)
    assert CAUTION in shown


def test_names_are_unique_and_bars_as_agreed() -> None:
    bars = {bar.name: bar for figure in command.FIGURES for bar in figure.bars}
    assert len(bars) == sum(len(figure.bars) for figure in command.FIGURES)
    assert len(command.BY_NAME) == len(command.FIGURES)
    for bar in bars.values():
        if bar.aim is not None:
            assert bar.is_met(bar.aim, bar.bar)


@pytest.mark.parametrize(("value", "status"), [(9.0, 0), (11.0, 1)])
def test_a_missed_bar_ends_a_full_run_with_status_1(
    value: float, status: int, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    ratio = replace(TIME, unit="ratio")
    figure = Figure("solve-lines", (ratio,), lambda run: [Result("time", value)], lambda run: lambda: None)
    monkeypatch.setattr(command, "FIGURES", (figure,))
    assert command.main(["--only", "solve-lines"]) == status
    assert capsys.readouterr().out.splitlines()[2].rstrip().endswith("no" if status else "yes")


def test_an_unknown_figure_is_refused(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit, match="2"):
        command.main(["--only", "everything"])
    assert "solve-lines" in capsys.readouterr().err


def test_a_profile_names_functions_and_compiled_kernels(capsys: pytest.CaptureFixture[str]) -> None:
    assert command.main(["--profile", "solve-lines", "--reduced"]) == 0
    shown = capsys.readouterr().out
    assert " U (U = " in shown
    assert "(analyse)" in shown
    assert "(add_conjugate)" in shown


def test_times_are_told_in_units_of_the_yardstick() -> None:
    figure = Figure("f", (TIME, FACTOR), lambda run: [], lambda run: lambda: None)
    results = [Result("factor", 30.0), Result("time", 0.08, {"cases": [{"part_seconds": 0.04, "count": 3}]})]
    time_row, factor_row = rows_of(figure, results, (0.01, 0.03))
    assert time_row.value == pytest.approx(4)
    assert factor_row.value == 30
    assert time_row.details == {"cases": [{"part_seconds": 0.04, "part_units": pytest.approx(2), "count": 3}]}
    assert (time_row.is_met, time_row.is_aim_met) == (True, True)
    assert (factor_row.is_met, factor_row.is_aim_met) == (True, False)
    with pytest.raises(ValueError, match="time"):
        rows_of(figure, results[1:], (0.01, 0.01))


def test_tables() -> None:
    rows = [Row(TIME, 12.3, {}, (1, 1)), Row(FACTOR, 61.0, {}, (1, 1))]
    assert "| time of a thing | 12.3 U | 10 U | 5 U | no |" in markdown_table(rows)
    assert "at least 50.000 x  yes, aim too" in text_table(rows)
    assert "yes" not in text_table(rows, is_judged=False)


@pytest.mark.parametrize(("total", "share"), [(0.02, 0.0), (0.3, 0.4), (0.9, 0.8)])
def test_the_search_finds_what_the_whole_grid_would(total: float, share: float) -> None:
    grid = Grid(tuple(0.01 * 1.3**k for k in range(20)), (0.0, 0.2, 0.4, 0.6, 0.8))

    def error(t: float, s: float) -> float:
        distance = math.log(t / total) + 0.8 * (s - share)
        return 0.05 + 0.02 * distance**2 + 0.03 * (s - share) ** 2

    best = best_of(error, grid)
    whole = min((error(t, s), t, s) for t in grid.totals for s in grid.shares)
    assert (best.error, best.total, best.share) == whole
    assert best.points < 0.7 * len(grid.totals) * len(grid.shares)


def test_side_by_side_keeps_the_order() -> None:
    assert side_by_side(abs, [-3, 2, -1], 1) == [3, 2, 1] == side_by_side(abs, [-3, 2, -1], 2)


@pytest.mark.parametrize("needed", [1, 8, 9, 37, 100])
def test_the_number_of_iterations_is_the_smallest(needed: int) -> None:
    assert iterations_to(lambda n: n >= needed, 100) == needed


def test_what_never_comes_close_is_an_error() -> None:
    with pytest.raises(RuntimeError, match="50"):
        iterations_to(lambda n: False, 50)


@pytest.mark.parametrize("rival", [Rival(0, 2.0), Rival(3, 2.0), Rival(0, 2.0, is_adaptive=True)])
def test_the_library_minimises_the_same_objective(rival: Rival) -> None:
    """Both solvers end at the same optimum, so the comparison of their times is one of like with like."""
    problem = small_problem(dtype=np.complex64)
    ours = objective(problem, solve(problem, tolerance=1e-6, max_iterations=2000).image)
    seen: list[float] = []
    run_rival(problem, rival, lambda x: seen.append(objective(problem, x)), 400)
    assert seen[-1] == pytest.approx(ours, rel=1e-4)
    assert seen[0] > 1.01 * ours


def test_wrapped_operators_are_adjoint() -> None:
    """<A x, y> = <x, A^H y> in the library's own form."""
    rng = np.random.default_rng(5)
    wrapped = Wrapped(small_problem(dtype=np.complex64).encoding)
    x = complex_normal(rng, (wrapped.shape[1],)).astype(np.complex64)
    y = complex_normal(rng, (wrapped.shape[0],)).astype(np.complex64)
    assert np.vdot(y, wrapped @ x) == pytest.approx(np.vdot(wrapped.H @ y, x), rel=1e-4)


def test_a_large_parent_does_not_count_as_the_child_s_memory() -> None:
    """A process inherits its parent's peak on some systems; what is told is its own."""
    before = idle_bytes()
    ballast = np.ones(60_000_000)
    after = idle_bytes()
    assert ballast.nbytes > 2 * abs(after - before)
    assert after < 1.2 * before


def test_a_failed_job_is_an_error(tmp_path: Path) -> None:
    with pytest.raises(RuntimeError, match="no such file"):
        run_job(tmp_path / "absent.h5", tmp_path / "image.h5", {})


@pytest.mark.anatomy
@pytest.mark.parametrize("kind", list(KINDS))
def test_a_moving_object_moves_and_is_sampled_anew_in_each_frame(kind: str) -> None:
    series = simulate_series(Motion(kind, 4, 30, 7, frames=5, matrix=64))
    change = series.truth - series.truth.mean(axis=0)
    share = np.linalg.norm(change[:, series.inside]) / np.linalg.norm(series.truth[:, series.inside])
    assert 0.02 < share < 0.3
    assert series.scan.mask_array is not None
    masks = np.asarray(series.scan.mask_array.data)
    assert (masks.sum(axis=1) == 16).all()
    assert len(np.unique(masks, axis=0)) == 5
    assert series.error(series.truth) == 0
    np.testing.assert_array_equal(simulate_series(Motion(kind, 4, 30, 7, 5, 64)).truth, series.truth)


def test_repeats_follow_the_run() -> None:
    run = Run(False, None, 1, Path())
    assert run.times(5) == 5
    assert replace(run, reduced=True).times(5) == 1
    assert replace(run, repeats=3).times(1) == 3
