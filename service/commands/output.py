"""How commands print: JSON for scripts, short lines for people, the caution with both."""

from __future__ import annotations

import json
import sys
import unicodedata
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from service.commands.failures import Refused


def print_json(value: Any) -> None:
    """One JSON document on standard output."""
    print(json.dumps(value, indent=2, ensure_ascii=False))


def print_facts(facts: Mapping[str, Any]) -> None:
    """Names and values in two columns; values that are None are left out."""
    shown = {name: value for name, value in facts.items() if value is not None}
    width = max((len(name) for name in shown), default=0)
    for name, value in shown.items():
        print(f"{name:<{width}}  {_clean(str(value))}")


def print_table(head: Sequence[str], rows: Iterable[Sequence[str]]) -> None:
    """Columns as wide as their widest cell."""
    table = [list(head), *([_clean(cell) for cell in row] for row in rows)]
    widths = [max(len(cell) for cell in column) for column in zip(*table, strict=True)]
    for row in table:
        print("  ".join(f"{cell:<{width}}" for cell, width in zip(row, widths, strict=True)).rstrip())


def _clean(cell: str) -> str:
    """A cell without control characters: what others wrote must not steer the terminal."""
    return "".join(" " if unicodedata.category(character) == "Cc" else character for character in cell)


def print_findings(findings: Iterable[Mapping[str, Any]]) -> None:
    """One line for each finding, worst first."""
    order = {"error": 0, "warning": 1, "info": 2}
    for finding in sorted(findings, key=lambda finding: order.get(str(finding.get("severity")), 3)):
        where = f" ({finding['where']})" if finding.get("where") else ""
        print(f"{finding['severity']}: {finding['message']}{where}")


def print_caution(caution: str) -> None:
    """The caution, last, where it is not overlooked."""
    print(caution)


def note(line: str) -> None:
    """A line beside the result, on standard error."""
    print(line, file=sys.stderr)


def read_settings(path: Path | None) -> dict[str, Any]:
    """Settings from a JSON file; none without a file.

    Raises
    ------
    Refused
        The file is missing, or holds something other than one JSON object.
    """
    if path is None:
        return {}
    try:
        settings = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise Refused(f"cannot read the settings file {path} ({error.strerror}): check the path.") from error
    except (ValueError, RecursionError) as error:
        raise Refused(
            f"the settings file {path} is not JSON ({error}): write one object like {_EXAMPLE}."
        ) from error
    if not isinstance(settings, dict):
        kind = type(settings).__name__
        raise Refused(f"the settings file {path} holds a JSON {kind}: write one object like {_EXAMPLE}.")
    return settings


_EXAMPLE = '{"method": "tikhonov"}'
