from __future__ import annotations

import subprocess
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from tests.publisher.build import compile_example, compile_program, require_compiler


@pytest.fixture(scope="session")
def compiled(tmp_path_factory: pytest.TempPathFactory) -> Callable[[str], Path]:
    """Compiles a program by its name once: `example`, or a driver beside these tests."""
    folder = tmp_path_factory.mktemp("publisher")
    require_compiler(folder)
    programs: dict[str, Path] = {}

    def compile_once(name: str) -> Path:
        if name not in programs:
            source = Path(__file__).with_name(f"{name}.cpp")
            programs[name] = compile_example(folder) if name == "example" else compile_program(source, folder)
        return programs[name]

    return compile_once


@pytest.fixture
def endpoint(tmp_path: Path) -> str:
    return f"ipc://{tmp_path}/publisher"


@pytest.fixture
def start() -> Iterator[Callable[..., subprocess.Popen[str]]]:
    """Starts a driver with pipes; whatever still runs at the end of the test is ended."""
    processes: list[subprocess.Popen[str]] = []

    def start_program(*command: object) -> subprocess.Popen[str]:
        process = subprocess.Popen(
            [str(part) for part in command], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
        )
        processes.append(process)
        return process

    yield start_program
    for process in processes:
        with process:  # closes the pipes and waits
            process.kill()
