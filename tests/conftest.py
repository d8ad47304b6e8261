"""Settings every test shares."""

import os
from pathlib import Path

import numpy as np
import pytest

# Floating-point accidents are failures, not warnings; underflow to zero is what exp() of a dark pixel is meant to do.
np.seterr(divide="raise", over="raise", invalid="raise", under="ignore")


@pytest.fixture(scope="session")
def recordings() -> Path:
    """Return the folder of real recordings, or skip the test where it is not there."""
    folder = os.environ.get("ENHANCE_RECORDINGS")
    if not folder or not Path(folder).is_dir():
        pytest.skip("set ENHANCE_RECORDINGS to the folder of real recordings to run this check")
    return Path(folder)
