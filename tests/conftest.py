"""What several test files share."""

import pytest
from commands import COLD, MAP, SWEEP, done, kondomf, write


@pytest.fixture(scope="session")
def chain(tmp_path_factory):
    """A folder in which a material was solved and a sweep was run."""
    folder = tmp_path_factory.mktemp("chain")
    material = write(folder)
    (folder / "sweep.toml").write_text(SWEEP)
    solved = kondomf("solve", material, "--state", folder / "state.h5", "--json", folder / "result.json")
    assert solved.exit_code == 0, solved.output
    (folder / "solve.txt").write_text(solved.stdout)
    (folder / "solve.log").write_text(solved.stderr)
    write(folder, MAP)
    (folder / "sweep.txt").write_text(done("sweep", folder / "sweep.toml"))
    write(folder)
    done("effective", write(folder, COLD, "cold.toml"), "--json", folder / "model.json")
    return folder
