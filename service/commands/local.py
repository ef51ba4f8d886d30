"""`fallow reconstruct` and `fallow inspect`: on this machine, without a service."""

from __future__ import annotations

import argparse
from collections.abc import Mapping
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from service.commands.failures import ExitCode, Refused
from service.commands.output import print_caution, print_facts, print_findings, print_json, read_settings

if TYPE_CHECKING:
    _Commands = argparse._SubParsersAction[argparse.ArgumentParser]


def add_commands(commands: _Commands) -> None:
    """Add both to the parser."""
    reconstruct = commands.add_parser("reconstruct", help="turn a scan file into an image, without a service")
    reconstruct.add_argument("scan", type=Path, metavar="SCAN", help="scan file (HDF5)")
    reconstruct.add_argument(
        "-o", "--output", type=Path, required=True, metavar="IMAGE.h5", help="result file"
    )
    reconstruct.add_argument(
        "--settings", type=Path, metavar="FILE.json", help="settings that differ from the defaults"
    )
    reconstruct.add_argument(
        "--report", type=Path, metavar="FILE.json", help="write the consistency report there too"
    )
    reconstruct.add_argument(
        "--picture", type=Path, metavar="FILE.png", help="write a picture of the image there too"
    )
    reconstruct.set_defaults(run=run_reconstruct)
    inspect = commands.add_parser("inspect", help="show what a scan file holds and what is wrong with it")
    inspect.add_argument("scan", type=Path, metavar="SCAN", help="scan file (HDF5)")
    inspect.set_defaults(run=run_inspect)
    for command in (reconstruct, inspect):
        command.add_argument("--json", action="store_true", help="print JSON for scripts")


def run_reconstruct(arguments: argparse.Namespace) -> int:
    """Reconstruct one scan; the files appear together when all are complete, never half of one."""
    from service.commands.reconstruction import reconstruct_to_files

    _check_files(arguments)
    written = {"image": arguments.output, "report": arguments.report, "picture": arguments.picture}
    report = reconstruct_to_files(
        arguments.scan,
        read_settings(arguments.settings),
        image=arguments.output,
        report=arguments.report,
        picture=arguments.picture,
    )
    if arguments.json:
        print_json({"files": {name: str(path) for name, path in written.items() if path}, "report": report})
        return ExitCode.DONE
    print_facts({**written, **summary(report)})
    print_findings(report["findings"])
    print_caution(report["caution"])
    return ExitCode.DONE


def run_inspect(arguments: argparse.Namespace) -> int:
    """Look through all the data of a scan and say what was found."""
    from recon.formats import open_scan
    from recon.inspection import inspect
    from service.progress import ProgressLine

    _check_scan(arguments.scan)
    with open_scan(arguments.scan) as scan, ProgressLine() as line:
        line.update("inspect", 0.0)
        found = inspect(scan, progress=partial(line.update, "inspect")).as_dict()
    if arguments.json:
        print_json(found)
        return ExitCode.DONE
    print_facts(
        {
            "scan": arguments.scan,
            "title": found["title"],
            "axes": ", ".join(f"{axis} {size}" for axis, size in found["axes"].items()),
            **{name.replace("_", " "): _shown(value) for name, value in found["sampling"].items()},
        }
    )
    print_findings(found["findings"])
    print_caution(found["caution"])
    return ExitCode.DONE


def summary(report: Mapping[str, Any]) -> dict[str, Any]:
    """The figures of a report that people look at first."""
    chi_squared = report["consistency"]["reduced_chi_squared"]
    solver = report["solver"]
    planes = len(solver["planes"])
    return {
        "method": report["settings"]["method"],
        "net acceleration": _shown(report["sampling"]["net_acceleration"]),
        "reduced chi-squared": _shown(chi_squared["value"]) if chi_squared else None,
        "solver": f"{solver['converged_planes']} of {planes} {solver['solved_as']} converged"
        if planes
        else None,
    }


def _shown(value: Any) -> str | None:
    if value is None or value == {}:
        return None
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.4g}"
    if isinstance(value, Mapping):
        return ", ".join(f"{name} {_shown(part)}" for name, part in value.items())
    if isinstance(value, list | tuple):
        return " x ".join(str(_shown(part)) for part in value)
    return str(value)


def _check_scan(path: Path) -> None:
    if not path.is_file():
        raise Refused(f"no scan file at {path}: check the path.")


def _check_files(arguments: argparse.Namespace) -> None:
    _check_scan(arguments.scan)
    outputs = [path for path in (arguments.output, arguments.report, arguments.picture) if path is not None]
    inputs = [path for path in (arguments.scan, arguments.settings) if path is not None]
    seen = {path.resolve() for path in inputs}
    for path in outputs:
        if path.resolve() in seen:
            raise Refused(f"{path} is named twice, or is also an input: give every file a name of its own.")
        seen.add(path.resolve())
        if path.is_dir():
            raise Refused(f"{path} is a folder: name a file in it, for example {path / 'image.h5'}.")
        if not path.resolve().parent.is_dir():
            raise Refused(f"there is no folder {path.resolve().parent} for {path.name}: make it first.")
