"""The README's table of settings is that of the settings model."""

from __future__ import annotations

import json
import re

from recon.settings import Settings
from tests.readme import ROOT


def test_every_setting_is_listed_with_its_default() -> None:
    _, _, after = (ROOT / "README.md").read_text(encoding="utf-8").partition("\n## Settings\n")
    rows = re.findall(r"^\| `(\w+)` \|.*\| `([^`]+)` \|$", after.partition("\n## ")[0], re.MULTILINE)
    listed = {name: json.loads(default) for name, default in rows}
    assert listed == Settings().model_dump(mode="json")
