"""Analyses of invented data for the report, and Chromium driven over its debugging pipe."""

from __future__ import annotations

import base64
import fcntl
import functools
import json
import os
import subprocess
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from robustrm.analysis import Analysis, analyze
from robustrm.plan import Plan
from robustrm.table import OccasionTable


def invented(
    n: int = 12,
    k: int = 3,
    *,
    missing: int = 0,
    below: int = 0,
    seed: int = 1,
    marker: str = "calprotectin",
    unit: str | None = "µg/g",
) -> OccasionTable:
    """Return invented skewed data: a long tail between subjects, a fall over the occasions."""
    rng = np.random.default_rng(seed)
    centre = rng.normal(1.5, 0.8, (n, 1)) - 0.3 * np.arange(k)
    values = np.round(np.exp(centre + rng.normal(0, 0.4, (n, k))), 2)
    limit = float(np.sort(values, axis=None)[below])
    flags = values < limit
    values = np.where(flags, limit, values)
    for gap in range(missing):
        values[2 * gap % n, (gap + 1) % k] = np.nan
        flags[2 * gap % n, (gap + 1) % k] = False
    return OccasionTable.from_array(
        values,
        occasions=[f"week {4 * j}" for j in range(k)],
        subjects=[f"P{i + 1}" for i in range(n)],
        marker=marker,
        unit=unit,
        below=flags,
        lower_limit=limit if below else None,
    )


def equal_values(n: int = 5, k: int = 3) -> OccasionTable:
    """Return subjects whose value never moves."""
    rows = np.repeat(np.arange(1.0, n + 1)[:, None], k, axis=1)
    return OccasionTable.from_array(rows, occasions=[f"visit {j + 1}" for j in range(k)])


def _cases() -> dict[str, tuple[OccasionTable, Plan]]:
    base = Plan(seed=7)
    sure = base.replace(purpose="confirmatory")
    return {
        "plain": (invented(), base),
        "confirmatory": (invented(), sure),
        "two occasions": (invented(10, 2), sure),
        "four, all pairs": (invented(12, 4, missing=2), sure.replace(contrasts="all")),
        "five, successive": (invented(9, 5, below=4), base.replace(contrasts="successive")),
        "missing and censored": (invented(14, 4, missing=3, below=6), base),
        "mostly below": (invented(11, 3, below=20), sure),
        "raw scale": (invented(unit="mg/L"), sure.replace(scale="raw")),
        "three subjects": (invented(3), base),
        "one subject": (invented(1), base),
        "all tied": (equal_values(), sure.replace(marker_kind="score")),
        "one-sided": (invented(), sure.replace(sides=1, direction="less")),
        "simultaneous": (invented(), sure.replace(intervals="simultaneous")),
        "randomised order": (invented(), sure.replace(design="randomised-order")),
        "zeros dropped": (invented(), base.replace(zeros="drop", adjust="hommel")),
        "unadjusted": (invented(), sure.replace(adjust="none")),
        "monte carlo": (invented(14, 5), sure.replace(stages=(999,), omnibus="mean_permutation")),
        "closed": (invented(), sure.replace(adjust="closed", pair="sign_flip", contrasts="all")),
        "parametric plan": (invented(), sure.replace(pair="paired_t", omnibus="anova")),
        "no complete subject": (invented(3, 4, missing=3), base),
        "zeros in raw data": (_with_a_zero(), sure.replace(scale="raw")),
    }


def _with_a_zero() -> OccasionTable:
    values = invented(8).values.copy()
    values[0, 0] = 0.0
    return OccasionTable.from_array(values, occasions=["a", "b", "c"], marker="count", unit=None)


CASES = _cases()


@functools.cache
def analyzed(name: str) -> Analysis:
    """Return the analysis of a case, made once: nothing in it can be changed."""
    return analyze(*CASES[name])


@pytest.fixture(params=list(CASES))
def varied(request: pytest.FixtureRequest) -> Analysis:
    """Return each of many different analyses in turn."""
    return analyzed(request.param)


@pytest.fixture
def analysis() -> Analysis:
    """Return an analysis with missing and censored values."""
    return analyzed("missing and censored")


@pytest.fixture
def small() -> Analysis:
    """Return an analysis with few figures, where only the files matter."""
    return analyzed("two occasions")


@pytest.fixture
def mostly_below() -> Analysis:
    """Return an analysis in which no ratio can be estimated."""
    return analyzed("mostly below")


@pytest.fixture
def hostile() -> Analysis:
    """Return an analysis whose labels try to break out of every format."""
    labels = ["<b>week 0</b>", "=1+2", '"><script>alert(1)</script>']
    values = invented(7).values
    table = OccasionTable.from_array(
        values,
        occasions=labels,
        subjects=["@SUM(A1)", "+1", "-2", "=cmd", "{{ 7*7 }}", "\x1b[31mred", 'a,b\n"c"'],
        marker="<img src=x onerror=alert(1)>",
        unit="</style>&amp;",
    )
    return analyze(table, Plan(seed=1))


# ── Chromium ──────────────────────────────────────────────────────────────────────────────

_FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--remote-debugging-pipe",
)  # fmt: skip


class Browser:
    """One Chromium, asked over its pipe: JSON messages that end with a zero byte."""

    def __init__(self, program: str, profile: Path) -> None:
        asked, self._ask = os.pipe()
        self._hear, answered = os.pipe()
        # Chromium reads from 3 and writes to 4; copies above 9 cannot be overwritten on the way.
        low = fcntl.fcntl(asked, fcntl.F_DUPFD, 10), fcntl.fcntl(answered, fcntl.F_DUPFD, 10)

        def place() -> None:
            os.dup2(low[0], 3)
            os.dup2(low[1], 4)

        self._process = subprocess.Popen(
            [program, *_FLAGS, f"--user-data-dir={profile}"],
            pass_fds=(3, 4),
            preexec_fn=place,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        for end in (asked, answered, *low):
            os.close(end)
        self._count = 0
        self._rest = b""
        self._session: str | None = None
        self.complaints: list[str] = []

    def close(self) -> None:
        self._session = None
        self.call("Browser.close")
        self._process.wait()
        os.close(self._ask)
        os.close(self._hear)

    def call(self, method: str, **params: Any) -> dict[str, Any]:
        self._count += 1
        message = {"id": self._count, "method": method, "params": params}
        if self._session is not None:
            message["sessionId"] = self._session
        os.write(self._ask, json.dumps(message).encode() + b"\0")
        while True:
            heard = self._listen()
            if heard.get("id") == self._count:
                assert "error" not in heard, heard["error"]
                return heard["result"]

    def wait_for(self, event: str) -> None:
        while self._listen().get("method") != event:
            pass

    def _listen(self) -> dict[str, Any]:
        while b"\0" not in self._rest:
            part = os.read(self._hear, 65536)
            assert part, "Chromium closed its pipe"
            self._rest += part
        first, self._rest = self._rest.split(b"\0", 1)
        message = json.loads(first)
        if message.get("method") in ("Log.entryAdded", "Runtime.exceptionThrown"):
            self.complaints.append(json.dumps(message["params"]))
        if message.get("method") == "Runtime.consoleAPICalled":
            self.complaints.append(json.dumps(message["params"]["args"]))
        return message

    def open(self, path: Path, width: int, height: int = 900) -> None:
        """Open a file in a new page that is `width` CSS pixels wide."""
        self._session = None
        self.complaints = []
        page = self.call("Target.createTarget", url="about:blank")["targetId"]
        self._session = self.call("Target.attachToTarget", targetId=page, flatten=True)["sessionId"]
        for domain in ("Page", "Runtime", "Log"):
            self.call(f"{domain}.enable")
        self.call(
            "Emulation.setDeviceMetricsOverride",
            width=width, height=height, deviceScaleFactor=1, mobile=width < 600,
        )  # fmt: skip
        self.call("Page.navigate", url=path.as_uri())
        self.wait_for("Page.loadEventFired")

    def evaluate(self, expression: str) -> Any:
        answer = self.call("Runtime.evaluate", expression=expression, returnByValue=True)
        assert "exceptionDetails" not in answer, answer
        return answer["result"].get("value")

    def screenshot(self, path: Path) -> None:
        shot = self.call("Page.captureScreenshot", captureBeyondViewport=True)
        path.write_bytes(base64.b64decode(shot["data"]))

    def print_to(self, path: Path) -> None:
        path.write_bytes(base64.b64decode(self.call("Page.printToPDF")["data"]))


@pytest.fixture
def browser(chromium: str, tmp_path: Path) -> Iterator[Browser]:
    """Return a running Chromium with a profile of its own."""
    running = Browser(chromium, tmp_path / "profile")
    yield running
    running.close()
