"""The robots of these tests, made ready once: each size of the blocks has to be compiled."""

from __future__ import annotations

import pytest

from monitor.setup.build import Setup
from tests.flow.rig import PAIR, PAIR_JOINTS, SLED, SLED_JOINTS, Rig, made


@pytest.fixture(scope="session")
def pair_setup() -> Setup:
    return made(PAIR, PAIR_JOINTS, {"serial": "P-1", "tool_link": "tip"})


@pytest.fixture(scope="session")
def sled_setup() -> Setup:
    return made(SLED, SLED_JOINTS, {"base": "floating"})


@pytest.fixture
def pair(pair_setup: Setup) -> Rig:
    return Rig(pair_setup)
