"""``portfire --help`` answers at once."""

from __future__ import annotations

import resource
import subprocess
import sys

SLOW_MODULES = {"jax", "scipy", "pandas", "pyarrow", "xarray", "matplotlib"}


def children_cpu_s() -> float:
    usage = resource.getrusage(resource.RUSAGE_CHILDREN)
    return usage.ru_utime + usage.ru_stime


def help_cpu_s() -> float:
    before = children_cpu_s()
    done = subprocess.run(
        [sys.executable, "-m", "portfire", "--help"], capture_output=True, text=True, check=True
    )
    assert "portfire" in done.stdout
    return children_cpu_s() - before


def test_help_takes_less_than_half_a_second() -> None:
    assert min(help_cpu_s() for _ in range(3)) < 0.5


def test_help_loads_nothing_slow() -> None:
    program = (
        "import atexit, sys\n"
        "atexit.register(lambda: print(*sys.modules, file=sys.stderr))\n"
        "sys.argv = ['portfire', '--help']\n"
        "from portfire.cli import main\n"
        "main()\n"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    assert SLOW_MODULES.isdisjoint(done.stderr.split())
