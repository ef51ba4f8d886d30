"""Planes shared between threads: the same bytes, in order, few at a time, cancelled together."""

from __future__ import annotations

import threading
from itertools import pairwise

import numpy as np
import pytest

from recon.errors import Cancelled
from recon.parallel import in_order
from recon.pipeline import reconstruct
from tests.recon.scans import example


@pytest.mark.parametrize("threads", [1, 2, 3])
def test_results_come_in_order_and_few_exist_at_once(threads: int) -> None:
    begun, taken = 0, 0
    lock = threading.Lock()
    most = 0

    def square(item: int) -> int:
        nonlocal begun, most
        with lock:
            begun += 1
            most = max(most, begun - taken)
        return item * item

    seen = []
    for value in in_order(square, range(20), threads=threads):
        seen.append(value)
        with lock:
            taken += 1
    assert seen == [item * item for item in range(20)]
    assert most <= threads + 2  # one more than waits: the one being taken


def test_the_first_exception_ends_the_work() -> None:
    done: list[int] = []

    def fail(item: int) -> int:
        if item == 3:
            raise ValueError("item 3")
        done.append(item)
        return item

    with pytest.raises(ValueError, match="item 3"):
        list(in_order(fail, range(1000), threads=2))
    assert len(done) < 20


def test_threads_change_no_byte_of_image_and_report() -> None:
    scan = example(sizes={"slice": 3, "frame": 2}).scan
    one, two = reconstruct(scan, threads=1), reconstruct(scan, threads=2)
    np.testing.assert_array_equal(one.image.view(np.float32), two.image.view(np.float32))
    assert one.report == two.report


def test_progress_of_threads_only_grows_and_ends_at_one() -> None:
    seen: list[float] = []
    scan = example(sizes={"slice": 4}).scan
    reconstruct(scan, progress=lambda stage, part: seen.append(part), threads=2)
    assert all(a <= b <= 1 for a, b in pairwise(seen))
    assert seen[-1] == 1


@pytest.mark.parametrize("stage", ["coil-maps", "solve", "write"])
def test_raising_from_progress_cancels_all_threads(stage: str) -> None:
    calls_after = 0
    raised = False

    def cancel(now: str, part: float) -> None:
        nonlocal calls_after, raised
        calls_after += raised
        if now == stage:
            raised = True
            raise Cancelled("stopped by the caller")

    with pytest.raises(Cancelled):
        reconstruct(example(sizes={"slice": 6}).scan, progress=cancel, threads=2)
    assert calls_after == 0
