"""How long the properties run (few examples, always the same ones, unless GDMT_CARDS_EXAMPLES is "deep"), and the command."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import CliRunner, Result
from hypothesis import HealthCheck, settings

from cds.cli import main

_SLOW_IS_FINE = [HealthCheck.too_slow, HealthCheck.data_too_large]

settings.register_profile(
    "few", max_examples=30, derandomize=True, database=None, deadline=None, suppress_health_check=_SLOW_IS_FINE
)
settings.register_profile(
    "deep", max_examples=1000, database=None, deadline=None, print_blob=True, suppress_health_check=_SLOW_IS_FINE
)
_IS_DEEP = os.environ.get("GDMT_CARDS_EXAMPLES") == "deep"
settings.load_profile("deep" if _IS_DEEP else "few")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Leave the tests marked `deep` to the deep run."""
    if _IS_DEEP or config.option.markexpr:
        return
    long_runs = [item for item in items if item.get_closest_marker("deep")]
    if long_runs:
        config.hook.pytest_deselected(items=long_runs)
        items[:] = [item for item in items if item not in long_runs]


@pytest.fixture
def command(tmp_path: Path) -> Callable[..., Result]:
    """Run the command on some bytes: `command(data, "record", "--strict")`; `assess` on 2026-03-01 unless told otherwise."""
    file = tmp_path / "bundle.json"

    def run(data: bytes, name: str = "assess", *options: str) -> Result:
        file.write_bytes(data)
        given = options if "--as-of" in options else ("--as-of", "2026-03-01", *options)
        return CliRunner().invoke(main, [name, str(file), *given])

    return run
