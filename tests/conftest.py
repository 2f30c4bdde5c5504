"""Ground rules of every test: repeatable draws, no network, no display, Chromium where asked."""

from __future__ import annotations

import os
import shutil
import socket
from collections.abc import Iterator
from typing import Any

import pytest
from hypothesis import HealthCheck, settings

# Set before anything imports matplotlib; child processes inherit it.
os.environ["MPLBACKEND"] = "Agg"

# Repeatable: derandomized. No deadline and no `too_slow`: both would make the clock a judge.
settings.register_profile(
    "ci",
    derandomize=True,
    deadline=None,
    max_examples=100,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.register_profile("local", settings.get_profile("ci"), max_examples=25)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "local"))

_LOCAL = ("localhost", "127.0.0.1", "::1")
_CHROMIUM_NAMES = ("chromium", "chromium-browser", "google-chrome", "google-chrome-stable")


@pytest.fixture(autouse=True)
def no_network(monkeypatch: pytest.MonkeyPatch) -> Iterator[list[str]]:
    """Fail a test that reaches for another machine, also where the code under test catches it."""
    attempts: list[str] = []

    def guard(name: str) -> None:
        original = getattr(socket.socket, name)

        def call(self: socket.socket, address: object) -> object:
            # A tuple is an Internet address; local sockets are named by a path.
            if isinstance(address, tuple) and address[0] not in _LOCAL:
                attempts.append(str(address))
                raise OSError(f"tests open no network connection, got {address!r}.")
            return original(self, address)

        monkeypatch.setattr(socket.socket, name, call)

    resolve = socket.getaddrinfo

    def look_up(host: Any, *args: Any, **options: Any) -> object:
        if host is not None and host not in _LOCAL:
            attempts.append(str(host))
            raise OSError(f"tests look up no host name, got {host!r}.")
        return resolve(host, *args, **options)

    guard("connect")
    guard("connect_ex")
    monkeypatch.setattr(socket, "getaddrinfo", look_up)
    yield attempts
    assert not attempts, f"the test reached for the network: {', '.join(attempts)}"


def _find_chromium() -> str:
    """Return the browser's path; its absence skips, or fails where a browser is promised."""
    for name in _CHROMIUM_NAMES:
        if path := shutil.which(name):
            return path
    reason = f"no Chromium on PATH (looked for {', '.join(_CHROMIUM_NAMES)})"
    if os.environ.get("ROBUSTRM_REQUIRE_BROWSER") == "1":
        pytest.fail(f"{reason}, and ROBUSTRM_REQUIRE_BROWSER=1 demands it", pytrace=False)
    pytest.skip(reason)


def pytest_runtest_setup(item: pytest.Item) -> None:
    """Look for the browser before a test that is marked as needing it."""
    if item.get_closest_marker("browser"):
        _find_chromium()


@pytest.fixture
def chromium() -> str:
    """Return the path of a Chromium program."""
    return _find_chromium()
