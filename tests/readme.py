"""What README.md tells people to type."""

from __future__ import annotations

import re
from pathlib import Path

ROOT = Path(__file__).parents[1]


def blocks(language: str, *, section: str) -> list[tuple[str, str]]:
    """Code blocks (language, text) of one section, those of `language` or, for ``""``, of every language."""
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    _, _, after = text.partition(f"\n## {section}\n")
    body = re.split(r"\n## ", after)[0]
    found = re.findall(r"^```(\w+)\n(.*?)^```$", body, re.MULTILINE | re.DOTALL)
    return [(name, block) for name, block in found if language in ("", name)]
