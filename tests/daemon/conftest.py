from __future__ import annotations

import shutil
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import ExitStack
from pathlib import Path
from typing import Any, Protocol

import pytest

from tests.daemon.running import Daemon
from tests.replay.rind import write_rind


class Start(Protocol):
    """Starts a daemon."""

    def __call__(
        self, settings: Mapping[str, Any] = ..., watch: Mapping[str, float] = ..., config: Path | None = None
    ) -> Daemon:
        """Set keys of the configuration (Rind's, where none is given) and start."""


@pytest.fixture
def short_folder() -> Iterator[Path]:
    """A folder whose path is short enough for the names of local sockets."""
    folder = Path(tempfile.mkdtemp(prefix="lt-"))
    yield folder
    shutil.rmtree(folder)


@pytest.fixture
def start(tmp_path: Path, short_folder: Path) -> Iterator[Start]:
    """Starts daemons; whatever still runs at the end of the test is ended."""
    with ExitStack() as stack:

        def start_daemon(
            settings: Mapping[str, Any] | None = None,
            watch: Mapping[str, float] | None = None,
            config: Path | None = None,
        ) -> Daemon:
            folder = Path(tempfile.mkdtemp(prefix="", dir=short_folder))
            daemon = Daemon(config or write_rind(tmp_path, watch or {}), folder, settings or {})
            stack.callback(daemon.end)
            return daemon

        yield start_daemon
