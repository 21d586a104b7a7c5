import numpy as np
import pytest
from hypothesis import settings

# A busy machine is slow, not wrong: no example has a deadline. The same examples are tried every time.
settings.register_profile("steady", deadline=None, derandomize=True)
settings.load_profile("steady")


@pytest.fixture
def rng():
    return np.random.default_rng(20261201)
