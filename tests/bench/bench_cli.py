"""How long `shelfmap --help` takes as a whole process, against a Python that does nothing.

Run with ``pytest tests/bench/bench_cli.py -o "addopts=" -s``; the last test prints the ratio.
"""

import subprocess
import sys
import time
from pathlib import Path

import pytest

COMMANDS = {
    "help": [str(Path(sys.executable).with_name("shelfmap")), "--help"],
    "help of screen": [str(Path(sys.executable).with_name("shelfmap")), "screen", "--help"],
    "nothing": [sys.executable, "-c", "pass"],
}
MEDIANS: dict[str, float] = {}


@pytest.mark.benchmark(group="whole process")
@pytest.mark.parametrize("name", COMMANDS)
def test_process(benchmark, name):
    def run() -> None:
        subprocess.run(COMMANDS[name], stdout=subprocess.DEVNULL, check=True)

    benchmark.pedantic(run, rounds=15, warmup_rounds=2)
    MEDIANS[name] = benchmark.stats.stats.median


def test_ratio(capsys):
    """Help comes within a fifth of a second."""
    if len(MEDIANS) < len(COMMANDS):
        pytest.skip("needs the runs above")
    with capsys.disabled():
        print(  # noqa: T201
            f"\n{time.strftime('%F')} --help {1e3 * MEDIANS['help']:.0f} ms, "
            f"{MEDIANS['help'] / MEDIANS['nothing']:.1f}x a Python that does nothing"
        )
    assert MEDIANS["help"] < 0.2
