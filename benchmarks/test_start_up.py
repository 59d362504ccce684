"""What starting costs: `import mechbench` and `mechbench --help`, beside what Python and numpy cost, in one run.

The bounds of the design are 0.3 s and 0.4 s; seconds depend on the machine, so the ratio to importing numpy alone is
printed beside them. Run with ``pytest benchmarks -s``.
"""

from __future__ import annotations

import os
import subprocess
import sys
import time

import pytest


def _seconds(arguments: list[str], repeats: int = 7) -> float:
    """Take the best of some runs of this Python with the arguments."""
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        subprocess.run([sys.executable, *arguments], check=True, capture_output=True)  # noqa: S603 - this very Python
        times.append(time.perf_counter() - start)
    return min(times)


@pytest.mark.parametrize(
    ("what", "arguments"),
    [("import mechbench", ["-c", "import mechbench"]), ("mechbench --help", ["-m", "mechbench", "--help"])],
)
def test_start_up(benchmark, what, arguments):
    """Starting costs little more than numpy does."""
    bare = _seconds(["-c", "pass"])
    numpy = _seconds(["-c", "import numpy"])
    benchmark.pedantic(lambda: _seconds(arguments, 1), rounds=7)
    ours = benchmark.stats.stats.min
    benchmark.extra_info["against import numpy"] = round(ours / numpy, 2)
    print(f"\n{what}: {ours:.3f} s, {ours / numpy:.2f} x `import numpy`, {ours / bare:.1f} x a bare Python", end="")
    print(f" ({os.cpu_count()} cores)")
