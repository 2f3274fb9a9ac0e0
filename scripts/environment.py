"""Shared by the set-up commands: a virtual environment with the package, and commands that are shown as they run."""

import os
import subprocess
import sys
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
ENVIRONMENT = ROOT / ".venv"
BIN = ENVIRONMENT / ("Scripts" if os.name == "nt" else "bin")


def run(*command: str | Path) -> None:
    """Print a command and run it from the project's root; exit with its code if it fails."""
    words = [str(word) for word in command]
    shown = [Path(words[0]).name, *words[1:]]
    print(f"\n$ {' '.join(shown)}", flush=True)
    code = subprocess.run(words, cwd=ROOT, check=False).returncode
    if code:
        sys.exit(code)


def install(extra: str = "") -> None:
    """Create the virtual environment if there is none, and install the package from this folder into it."""
    if sys.version_info < (3, 11):  # noqa: UP036 - a plain message beats the one of the installer
        sys.exit(f"Python 3.11 or newer is needed, this is {sys.version.split()[0]}")
    if not BIN.is_dir():
        print(f"creating a virtual environment in {ENVIRONMENT}", flush=True)
        venv.create(ENVIRONMENT, with_pip=True)
    run(BIN / "python", "-m", "pip", "install", "--quiet", "--editable", f".{extra}")
