"""The process behind the gate: ``python -m service.gatekeeper PARENT UPLOAD PREVIEW MEMORY SECONDS``.

It limits itself before it opens the file, writes the quick look, and answers with one JSON object on standard output:
`facts` and `title`, or `refused` with the reason.
"""

from __future__ import annotations

import json
import os
import sys
from pathlib import Path
from typing import Any, Final

from service.process import die_with_parent, limit, private_output

_LARGEST_PREVIEW: Final = 64 << 20
_OPEN_FILES: Final = 64


def examine(upload: Path, preview: Path) -> dict[str, Any]:
    """Open and inspect a scan file and draw its quick look."""
    from recon.formats import open_scan
    from recon.inspection import inspect
    from service.pictures import quick_look

    with open_scan(upload) as scan:
        facts = inspect(scan).as_dict()
        preview.write_bytes(quick_look(scan))
        return {"facts": facts, "title": scan.title}


def main() -> int:
    """Run as a process of its own."""
    parent, upload, preview, memory, seconds = sys.argv[1:]
    die_with_parent(int(parent))
    descriptor = private_output()
    # Imported while memory is free: the limit is for what the file makes us do.
    from recon.errors import InvalidScan

    limit(memory=int(memory), seconds=int(seconds), file_bytes=_LARGEST_PREVIEW, files=_OPEN_FILES)
    try:
        answer = examine(Path(upload), Path(preview))
    except InvalidScan as error:
        answer = {"refused": str(error)}
    except MemoryError:
        allowed = f"{int(memory) / (1 << 30):.1f} GiB"
        answer = {
            "refused": f"examining the file needs more than the {allowed} of memory allowed: send a smaller scan"
        }
    with os.fdopen(descriptor, "w", encoding="utf-8") as out:
        json.dump(answer, out, allow_nan=False)
    return 0


if __name__ == "__main__":
    sys.exit(main())
