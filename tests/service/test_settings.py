"""Threads of the computing processes: shared out between workers, or named by the user."""

from __future__ import annotations

import os

import pytest

from service.settings import SettingError, computing_threads


def test_cores_are_shared_between_workers(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("FALLOW_THREADS", raising=False)
    monkeypatch.setattr(os, "sched_getaffinity", lambda process: set(range(6)))
    assert [computing_threads(workers) for workers in (0, 1, 2, 4, 100)] == [6, 6, 3, 1, 1]


def test_the_user_may_name_the_number(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("FALLOW_THREADS", "3")
    assert computing_threads(8) == 3


@pytest.mark.parametrize("text", ["0", "-1", "two", "1.5", "100000"])
def test_other_numbers_are_refused(monkeypatch: pytest.MonkeyPatch, text: str) -> None:
    monkeypatch.setenv("FALLOW_THREADS", text)
    with pytest.raises(SettingError, match=f"FALLOW_THREADS is '{text}'; accepted"):
        computing_threads()
