"""What several test modules share: the laboratory folder, and hypothesis profiles."""

import os
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings

settings.register_profile(
    "default",
    deadline=None,
    derandomize=True,
    max_examples=60,
    suppress_health_check=[HealthCheck.too_slow],
    print_blob=True,
)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "default"))


def _lab_folder() -> Path | None:
    named = os.environ.get("BANDRATIO_LAB")
    folder = Path(named) if named else Path(__file__).parents[2] / "shared" / "lab"
    return folder if folder.is_dir() else None


@pytest.fixture(scope="session")
def lab() -> Path:
    """Folder of whole laboratory spectra (USGS splib07a, soil 62231), beside the checkout or in $BANDRATIO_LAB."""
    folder = _lab_folder()
    if folder is None:
        pytest.skip("no folder of laboratory spectra beside the checkout; set BANDRATIO_LAB to one")
    return folder
