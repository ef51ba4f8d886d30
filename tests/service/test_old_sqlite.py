"""An operating system's older SQLite: the queue engine asks it for fractions of a second all the same."""

from __future__ import annotations

import time
from pathlib import Path

import sqlalchemy as sa

from service.store.database import make_engine


def test_fractions_of_a_second_are_known_in_queries_and_defaults(tmp_path: Path) -> None:
    """SQLite before 3.42 answers NULL to `unixepoch('subsec')` (release notes of 3.42.0)."""
    engine = make_engine(f"sqlite:///{tmp_path / 'x.sqlite'}")
    with engine.begin() as connection:
        connection.execute(
            sa.text("CREATE TABLE t (a INTEGER, made INTEGER NOT NULL DEFAULT (unixepoch('subsec') * 1000))")
        )
        connection.execute(sa.text("INSERT INTO t (a) VALUES (1)"))
        made = connection.execute(sa.text("SELECT made FROM t")).scalar_one()
    engine.dispose()
    assert abs(made / 1000 - time.time()) < 5
