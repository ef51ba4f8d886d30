"""The client is light, and lives beside a user's script called ``recon.py``."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

from tests.client.scripted import answer, scripted

ROOT = Path(__file__).parents[2]


def run(script: Path, *arguments: str) -> str:
    """Run a script as a user does: its own folder comes first on the path."""
    return subprocess.run(
        [sys.executable, str(script), *arguments],
        env={"PYTHONPATH": str(ROOT), "PATH": ""},
        check=True,
        capture_output=True,
        text=True,
        timeout=60,
    ).stdout


def test_importing_the_client_loads_no_numerics(tmp_path: Path) -> None:
    script = tmp_path / "script.py"
    script.write_text(
        "import sys\nimport service.client\n"
        "heavy = {'numpy', 'h5py', 'scipy', 'pywt', 'pydantic', 'recon', 'PIL', 'fastapi', 'sqlalchemy'}\n"
        "print(sorted(heavy & set(sys.modules)))\n"
    )
    assert run(script) == "[]\n"


def test_script_called_recon_submits_and_waits(tmp_path: Path) -> None:
    """The user's own module of that name must win, and no array library may come in for a file on disk."""
    (tmp_path / "scan.h5").write_bytes(b"scan")
    script = tmp_path / "recon.py"
    script.write_text(
        "import sys\n"
        "from service.client import Client\n"
        "if __name__ == '__main__':\n"
        "    import recon\n"
        "    with Client(sys.argv[1], 't') as client:\n"
        "        job = client.submit(sys.argv[2])\n"
        "        job.wait()\n"
        "    print(job.state, recon.__file__, {'numpy', 'h5py', 'pydantic'} & set(sys.modules))\n"
    )
    job = {"id": "j1", "state": "successful", "progress": 1.0}
    with scripted(answer({"id": "s1"}, 201), answer(job, 202)) as service:
        out = run(script, service.url, str(tmp_path / "scan.h5"))
    assert out == f"successful {script} set()\n"
