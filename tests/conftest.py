"""The demo's robot, made ready once for all tests that want a whole data path."""

from __future__ import annotations

import pytest

from monitor.setup.build import Setup, build
from monitor.setup.config import Config, loads
from monitor.setup.template import write_config
from replay.simulate import DATASHEET, URDF


@pytest.fixture(scope="session")
def rind_config() -> Config:
    text = write_config(URDF, "fixed", DATASHEET, URDF.parent)
    return loads(text, "rind.toml", {URDF.name: URDF.read_text(encoding="utf-8")})


@pytest.fixture(scope="session")
def rind_setup(rind_config: Config) -> Setup:
    return build(rind_config)
