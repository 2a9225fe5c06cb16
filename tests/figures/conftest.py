import sys
from pathlib import Path

import pytest

# Test folders are no packages; the builder lies beside this file.
sys.path.insert(0, str(Path(__file__).parent))


@pytest.fixture(scope="session")
def synthetic_folder(tmp_path_factory):
    """A run folder of the toy likelihood; tests that write copy it first."""
    from synthetic_run import write_run

    folder = tmp_path_factory.mktemp("toy") / "run"
    write_run(folder)
    return folder


@pytest.fixture(scope="session")
def material(synthetic_folder):
    from scanfit.plotting.material import Material

    return Material.read(synthetic_folder)
