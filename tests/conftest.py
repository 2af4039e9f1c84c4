from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def raw():
    """Folder of journal tables in their own text form, kept beside the tree and not part of it."""
    folder = Path(__file__).parents[2] / "shared" / "raw"
    if not folder.is_dir():
        pytest.skip("the journals' own text tables aren't here")
    return folder
