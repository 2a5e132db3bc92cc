"""Make the project's own environment, .venv, with nothing but the Python that runs this file.

Used by sample_project/start.py and tests/start.py, so that a fresh clone needs one command. The environment is made
once and installed again only when pyproject.toml or the Python version has changed.
"""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
OLDEST = (3, 11)


def environment(
    *extras: str, folder: str = ".venv", constraints: Path | None = None, tools: tuple[str, ...] = ()
) -> Path:
    """Path of the Python inside `folder`, where landassay is installed with `extras`. Exits with a message on failure.

    constraints: a file of versions to keep to. tools: further packages.
    """
    if sys.version_info < OLDEST:
        sys.exit(f"Landassay needs Python {OLDEST[0]}.{OLDEST[1]} or newer; this is {sys.version.split()[0]}.")
    place = ROOT / folder
    python = place / ("Scripts/python.exe" if os.name == "nt" else "bin/python")
    stamp = place / f"landassay-{'-'.join(('base', *extras))}.stamp"
    described = (ROOT / "pyproject.toml").read_bytes() + (constraints.read_bytes() if constraints else b"")
    wanted = hashlib.sha256(described + " ".join((*tools, sys.version)).encode()).hexdigest()
    if python.exists() and stamp.exists() and stamp.read_text() == wanted:
        return python
    if not python.exists():
        print(f"Making the environment {folder} ...", flush=True)
        try:
            venv.create(place, with_pip=True)
        except (subprocess.CalledProcessError, OSError) as error:
            sys.exit(
                f"The environment {folder} cannot be made ({error}). On Debian and Ubuntu the module 'venv' is a "
                "package of its own: python3-venv."
            )
    target = f"{ROOT}[{','.join(extras)}]" if extras else str(ROOT)
    print("Installing Landassay and the packages it needs (a few minutes the first time) ...", flush=True)
    install = [
        str(python),
        "-m",
        "pip",
        "install",
        "--quiet",
        "--disable-pip-version-check",
        "--editable",
        target,
        *tools,
    ]
    if constraints is not None:
        install += ["--constraint", str(constraints)]
    if subprocess.run(install, check=False).returncode:
        sys.exit("The installation failed; the lines above say why. The same command can be run again.")
    stamp.write_text(wanted)
    return python


def run(*command: str | Path) -> int:
    """Run a command from the repository's top folder and return its exit code."""
    return subprocess.run([str(part) for part in command], cwd=ROOT, check=False).returncode
