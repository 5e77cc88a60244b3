"""What all tests share: seeded noise, the folder of real recordings, and a header that says what is really tested."""

from pathlib import Path

import numpy as np
import pytest

SHARED_RECORDINGS = Path(__file__).resolve().parents[2] / "shared" / "recordings"


def pytest_report_header() -> str:
    import scipy

    return f"numpy {np.__version__}, scipy {scipy.__version__}, real recordings: {SHARED_RECORDINGS.is_dir()}"


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20310314)


@pytest.fixture(scope="session")
def shared_recordings() -> Path:
    if not SHARED_RECORDINGS.is_dir():
        pytest.skip(
            "needs the folder of real recordings and voices (../shared/recordings), which is not part of the project"
        )
    return SHARED_RECORDINGS
