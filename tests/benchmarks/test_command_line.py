"""How long `shoalmark --help` takes, beside the bare interpreter in the same run."""

from __future__ import annotations

import subprocess
import sys

import pytest
from pytest_benchmark.fixture import BenchmarkFixture


@pytest.mark.parametrize(
    "code",
    ["pass", "import sys; sys.argv = ['shoalmark', '--help']; from service.cli import main; main()"],
    ids=["bare-interpreter", "shoalmark-help"],
)
@pytest.mark.benchmark(group="command line")
def test_help(benchmark: BenchmarkFixture, code: str) -> None:
    result = benchmark(subprocess.run, [sys.executable, "-c", code], capture_output=True, text=True)
    assert result.returncode == 0
