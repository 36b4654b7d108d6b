"""What the wire tests share."""

from __future__ import annotations

import random

import pytest

from protobench.wire import Codec, load_codec

SEED = 20_250_301


@pytest.fixture(scope="session")
def codec() -> Codec:
    return load_codec()


@pytest.fixture
def rng() -> random.Random:
    """A seeded generator; the seed is printed, so that a failure shows it."""
    print(f"seed {SEED}")
    return random.Random(SEED)
