"""Peak memory of the computing process, for few and for many slices.

    python -m benchmarks.memory [--slices 8 64] [--matrix 256] [--coils 8] [--iterations N] [--output FILE.json]

Each scan is reconstructed from file to file in a process of its own, whose peak resident size the kernel reports.
It must stay below the limit and must not grow with the number of slices.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from benchmarks.quality import machine
from recon.caution import CAUTION
from recon.phantom import Ellipse, ellipse_kspace, ring_coils

LIMIT_MB = 800.0
#: growth from the smallest to the largest scan that is still taken for allocator noise.
GROWTH_MB = 40.0

CHILD = """
import json, resource, sys
from recon.pipeline import reconstruct_file
from recon.settings import parse_settings
report = reconstruct_file(sys.argv[1], sys.argv[2], parse_settings(json.loads(sys.argv[3])))
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
unit = 1 if sys.platform == "darwin" else 1024
print(json.dumps({"peak_mb": peak * unit / 1e6, "planes": len(report["solver"]["planes"])}))
"""


def write_large_scan(path: Path, *, slices: int, coils: int, matrix: int) -> None:
    """Write an undersampled scan slice by slice, so that this process stays small too."""
    rng = np.random.default_rng(4)
    clean = ellipse_kspace(
        [Ellipse(1.0, (0, 0), (0.7, 0.8)), Ellipse(-0.5, (0.2, 0.1), (0.2, 0.3), 20)],
        (matrix, matrix),
        maps=ring_coils(coils),
    )
    lines = (np.arange(matrix) - matrix // 2) % 3 == 0
    lines[matrix // 2 - 12 : matrix // 2 + 12] = True
    with h5py.File(path, "w") as file:
        file.attrs.update(layout="fallow-scan", layout_version=1)
        kspace = file.create_dataset("kspace", (slices, coils, matrix, matrix), np.complex64)
        kspace.attrs["axes"] = "slice,coil,ky,kx"
        for position in range(slices):
            noise = rng.standard_normal((2, *clean.shape), np.float32) * np.float32(0.02)
            kspace[position] = (clean * (1 + 0.01 * position) + noise[0] + 1j * noise[1]) * lines[:, None]
        file["mask"] = lines
        file["mask"].attrs["axes"] = "ky"
        silent = rng.standard_normal((2, coils, 2000)) * 0.02
        file["noise"] = (silent[0] + 1j * silent[1]).astype(np.complex64)
        file["noise"].attrs["axes"] = "coil,sample"


def measure(
    *, slices: int, coils: int, matrix: int, settings: dict[str, Any], folder: Path
) -> dict[str, Any]:
    """Return peak resident size and time of reconstructing one scan in a process of its own."""
    scan, image = folder / f"scan-{slices}.h5", folder / f"image-{slices}.h5"
    write_large_scan(scan, slices=slices, coils=coils, matrix=matrix)
    size_mb = scan.stat().st_size / 1e6
    started = time.perf_counter()
    command = [sys.executable, "-c", CHILD, str(scan), str(image), json.dumps(settings)]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    seconds = time.perf_counter() - started
    figures: dict[str, Any] = json.loads(done.stdout)
    scan.unlink()
    image.unlink()
    return {"slices": slices, "scan_mb": size_mb, "seconds": seconds, **figures}


def main(arguments: list[str] | None = None) -> int:
    """Print peak memory for each number of slices; exit status 1 when it grows or exceeds the limit."""
    parser = argparse.ArgumentParser(description="Peak memory of the computing process.")
    parser.add_argument("--slices", type=int, nargs="+", default=[8, 64])
    parser.add_argument("--matrix", type=int, default=256)
    parser.add_argument("--coils", type=int, default=8)
    parser.add_argument(
        "--iterations", type=int, help="stop each plane after this many instead of at its optimum"
    )
    parser.add_argument("--output", type=Path, help="write the figures as JSON")
    options = parser.parse_args(arguments)
    settings = {} if options.iterations is None else {"max_iterations": options.iterations}
    rows = []
    with tempfile.TemporaryDirectory() as folder:
        for slices in options.slices:
            row = measure(
                slices=slices,
                coils=options.coils,
                matrix=options.matrix,
                settings=settings,
                folder=Path(folder),
            )
            rows.append(row)
            print(
                f"{slices:4d} slices, {row['scan_mb']:6.0f} MB of k-space: peak {row['peak_mb']:.0f} MB, "
                f"{row['seconds']:.0f} s"
            )
    peaks = [row["peak_mb"] for row in rows]
    print(f"limit {LIMIT_MB:.0f} MB; growth {peaks[-1] - peaks[0]:+.0f} MB. {CAUTION}")
    if options.output:
        options.output.write_text(
            json.dumps({"caution": CAUTION, "rows": rows, "machine": machine()}, indent=2) + "\n"
        )
    return 0 if max(peaks) < LIMIT_MB and peaks[-1] - peaks[0] < GROWTH_MB else 1


if __name__ == "__main__":
    sys.exit(main())
