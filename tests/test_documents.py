"""The documents speak of files that exist and carry the caution."""

from __future__ import annotations

import json
import re

import pytest

from recon.caution import CAUTION
from recon.settings import Settings
from tests.readme import ROOT


@pytest.mark.parametrize("document", ["DEVELOPERS.md", "README.md", "sample_kspace/README.md"])
def test_every_file_named_exists(document: str) -> None:
    text = (ROOT / document).read_text(encoding="utf-8")
    named = set(re.findall(r"`((?:recon|service|deploy|tests|benchmarks|sample_kspace)/[\w./-]*)", text))
    assert {name for name in named if not (ROOT / name).exists()} == set()


@pytest.mark.parametrize("document", ["README.md", "sample_kspace/README.md"])
def test_caution_is_there(document: str) -> None:
    assert CAUTION in (ROOT / document).read_text(encoding="utf-8")


def test_readme_begins_with_exactly_two_commands() -> None:
    text = (
        (ROOT / "README.md")
        .read_text(encoding="utf-8")
        .partition("\n## Two commands\n")[2]
        .partition("\n## ")[0]
    )
    commands = [block.strip() for block in re.findall(r"^```sh\n(.*?)^```$", text, re.MULTILINE | re.DOTALL)]
    assert commands == ["deploy/quickstart.sh", "deploy/test.sh"]


def test_readme_has_every_setting_with_its_default() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    section = text.partition("\n## Settings\n")[2].partition("\n## ")[0]
    rows = re.findall(r"^\| `(\w+)` \| .+ \| `(.+?)` \|$", section, re.MULTILINE)
    written = [(name, json.loads(default)) for name, default in rows]
    assert written == list(Settings().model_dump(mode="json").items())
