"""Volumes solved as one problem each: all readout positions at once, wavelets and total variation along three axes."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from recon.joint_full import FullVolumes
from recon.joint_hybrid import HybridVolumes
from recon.joint_problem import solve_volume, stack_maps
from recon.phase import remove_phase
from recon.preparation import Preparation, Sink
from recon.progress import Teller
from recon.report import SolverFigures, build_report
from recon.tuning import Choice


def run_joint(
    preparation: Preparation,
    choice: Choice | None,
    sink: Sink,
    tell: Teller,
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Solve every volume of a scan, one for each frame and contrast; returns the report."""
    assert preparation.volume is not None
    solver = SolverFigures(choice)
    volumes = [index for index in preparation.scan.planes() if index.slice == 0]
    tell.begin(len(volumes))
    maps = None if preparation.map_method is None else stack_maps(preparation, tell)
    if preparation.volume.is_complete:
        assert maps is not None
        space: HybridVolumes | FullVolumes = HybridVolumes(preparation, maps)
    else:
        space = FullVolumes(preparation, maps)
    for volume in volumes:
        tell("solve")
        if isinstance(space, FullVolumes) and maps is None:
            space.coil_by_coil(volume, sink)
        elif isinstance(space, FullVolumes) and preparation.settings.method == "zero-filled":
            space.finish(volume, space.zero_filled(volume), sink)
        else:
            encoding, data = space.measure(volume)
            if preparation.settings.constraint != "none":
                encoding = remove_phase(encoding, data)
            callback = tell.iteration(volume, preparation.settings)
            solution = solve_volume(preparation, encoding, data, callback)
            solver.see([volume], solution)
            u = encoding.with_phase(solution.image)
            del encoding, data, solution
            tell("consistency")
            space.finish(volume, u, sink)
        tell("write")
        tell.finished(volume)
    return build_report(preparation, space.figures, solver, {} if maps is None else maps.figures, provenance)
