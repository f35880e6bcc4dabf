"""Checks against the world outside: every one names its source and is kept for validation.md."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

REPORT = Path(__file__).parents[2] / "reports" / "validation.md"
ROWS = pytest.StashKey[list[str]]()

HEAD = """# Validation: every check against the world outside

Written by `pytest tests/outside --write-validation`. Standing says how far the source was read:
*confirmed* (read in the source), *from memory* (not re-read), *derived* (follows by mathematics),
*library* (computed by an independent library in the same run).

| what | source | standing | expected | found | difference | tolerance | statement |
|---|---|---|---|---|---|---|---|
"""


def pytest_configure(config: pytest.Config) -> None:
    config.stash[ROWS] = []


@pytest.fixture
def outside(request: pytest.FixtureRequest) -> Callable[..., None]:
    """Compare a number found with one from outside, and record the comparison.

    ``outside(what, source=..., standing=..., expected=..., found=..., rtol=..., atol=...)``.
    Arrays are compared element by element; the largest difference is recorded.
    """

    def compare(
        what: str,
        *,
        source: str,
        standing: str,
        expected: Any,
        found: Any,
        rtol: float = 0.0,
        atol: float = 0.0,
    ) -> None:
        assert standing in ("confirmed", "from memory", "derived", "library")
        wanted, got = np.atleast_1d(expected), np.atleast_1d(found)
        tolerance = atol + rtol * np.abs(wanted)
        excess = np.abs(got - wanted) - tolerance
        worst = int(np.argmax(excess))
        passed = wanted.shape == got.shape and bool(np.all(excess <= 0))
        row = (
            f"| {what} | {source} | {standing} | {wanted.flat[worst]:.8g} | {got.flat[worst]:.8g}"
            f" | {got.flat[worst] - wanted.flat[worst]:.2g} | {tolerance.flat[worst]:.2g}"
            f" | {'pass' if passed else 'FAIL'} |"
        )
        request.config.stash[ROWS].append(row)
        assert passed, row

    return compare


def pytest_sessionfinish(session: pytest.Session) -> None:
    if session.config.getoption("--write-validation"):
        rows = sorted(session.config.stash[ROWS])
        REPORT.write_text(HEAD + "\n".join(rows) + "\n", encoding="utf-8")
