"""The import order of the subpackages, and what a start of the command line may load."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent


@pytest.mark.skipif(not (ROOT / "pyproject.toml").exists(), reason="runs in a checkout only")
def test_a_subpackage_imports_only_from_those_before_it():
    """The contract is in pyproject.toml; import-linter reads it."""
    command = [sys.executable, "-c", "from importlinter.cli import lint_imports_command; lint_imports_command()"]
    result = subprocess.run([*command, "--no-cache"], cwd=ROOT, capture_output=True, text=True, check=False)
    assert result.returncode == 0, result.stdout + result.stderr


def test_help_loads_no_numerical_library():
    """Starting the command line must not wait for libraries that the command does not use."""
    code = (
        "import sys; from click.testing import CliRunner; from kondomf.cli import main; "
        "assert CliRunner().invoke(main, ['--help']).exit_code == 0; "
        "heavy = {'numpy', 'scipy', 'matplotlib', 'h5py', 'distributed', 'numba', 'pydantic'}; "
        "print(sorted(heavy & set(sys.modules)))"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert result.stdout.strip() == "[]"
