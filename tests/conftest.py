"""Fixtures of every test: a seeded generator and deterministic hypothesis.  Nothing here touches JAX's precision."""

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")  # small matrices: several threads cost more than they bring

import numpy as np
import pytest
from hypothesis import settings

settings.register_profile("house", deadline=None, derandomize=True, database=None)
settings.load_profile("house")


@pytest.fixture
def rng() -> np.random.Generator:
    """The same numbers in every run, whatever the order of the tests."""
    return np.random.default_rng(20260101)
