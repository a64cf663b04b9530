"""What every test gets: no network, no way to the user's own library, one starter library."""

from __future__ import annotations

import os
import socket
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any, NoReturn

import pytest

from phaseid.library import Library, build_starter

_LONGEST_BUILD_S = 300.0


@pytest.fixture(scope="session", autouse=True)
def _no_network() -> Iterator[None]:
    """Refuse every connection that could leave the machine: phaseid works without a network."""

    def refuse(*_args: Any, **_kwargs: Any) -> NoReturn:
        raise AssertionError("a test tried to use the network")

    with pytest.MonkeyPatch.context() as patch:
        for name in ("connect", "connect_ex", "sendto"):
            patch.setattr(socket.socket, name, refuse)
        patch.setattr(socket, "getaddrinfo", refuse)
        yield


def _session_folder(factory: pytest.TempPathFactory) -> Path:
    """Return the folder that all workers of this run share."""
    base = factory.getbasetemp()
    return base.parent if "PYTEST_XDIST_WORKER" in os.environ else base


@pytest.fixture(scope="session", autouse=True)
def _own_default_library(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    """Keep the default library and the settings of whoever runs the tests out of reach."""
    with pytest.MonkeyPatch.context() as patch:
        folder = _session_folder(tmp_path_factory)
        patch.setenv("PHASEID_LIBRARY", str(folder / "default-library" / "library.sqlite"))
        patch.setenv("PHASEID_CONFIG", str(folder / "no-settings" / "config.toml"))
        for name in ("PROBE", "CALIBRATION", "MUST", "ONLY", "NOT"):
            patch.delenv(f"PHASEID_{name}", raising=False)
        yield


@pytest.fixture(scope="session")
def starter_library_path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Path of the starter library, built once a run, whichever worker asks first."""
    path = _session_folder(tmp_path_factory) / "starter.sqlite"
    try:
        os.close(os.open(path.with_suffix(".lock"), os.O_CREAT | os.O_EXCL))
    except FileExistsError:
        deadline = time.monotonic() + _LONGEST_BUILD_S
        while not path.exists():
            assert time.monotonic() < deadline, "the worker that builds the starter library failed"
            time.sleep(0.1)
    else:
        build_starter(path)
    return path


@pytest.fixture(scope="session")
def starter_library(starter_library_path: Path) -> Iterator[Library]:
    """The starter library, open for reading. Never add to it: make your own in tmp_path."""
    with Library.open(starter_library_path) as library:
        yield library
