"""How much memory there is."""

from __future__ import annotations

from pathlib import Path

from service.memory import memory_limit


def test_the_least_of_all_limits(tmp_path: Path) -> None:
    machine = memory_limit(())
    assert machine > 100_000_000
    group, unlimited, broken = (tmp_path / name for name in ("group", "unlimited", "broken"))
    group.write_text("123456789\n")
    unlimited.write_text("max\n")
    broken.write_bytes(b"\xff\xfe")
    assert memory_limit((unlimited, broken, tmp_path / "absent")) == machine
    assert memory_limit((unlimited, group)) == 123_456_789
