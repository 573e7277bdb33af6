"""Speed and memory against the targets of the design: ``python -m tests.benchmarks [--json]``.

Nothing is asserted and the exit status is always 0: a loaded machine must not fail the gate. Times are medians of wall
time; what is costly grows with the free-space Poisson solve of the same plane, measured in the same process, so its
ratios carry over from machine to machine. CPU time is shown beside it, because it hardly feels what else is running.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import sys
import time
from dataclasses import asdict

os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np
import scipy
from tests.benchmarks import speed
from tests.benchmarks.timing import Result, Timing


def environment() -> dict[str, str]:
    """What the numbers were measured with."""
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else float("nan")
    return {
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "machine": platform.machine(),
        "cores": str(os.cpu_count()),
        "load": f"{load:.1f}",
    }


def text_of(results: list[Result]) -> str:
    """The results as a table."""
    lines = [("what", "target", "measured", "CPU", "verdict", "how")]
    lines += [(one.what, one.target_text, one.measured_text, one.cpu_text, one.verdict, one.how) for one in results]
    widths = [max(len(line[k]) for line in lines) for k in range(5)]
    return "\n".join(
        "  ".join([*(c.ljust(w) for c, w in zip(line[:5], widths, strict=True)), line[5]]) for line in lines
    )


def main() -> None:
    """Run all measurements and print them."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks", description=__doc__)
    parser.add_argument("--json", action="store_true", help="print JSON instead of a table")
    parser.add_argument("--only", help="run the groups whose name contains this")
    options = parser.parse_args()
    start = time.perf_counter()
    results: list[Result] = []
    for name, group in speed.GROUPS.items():
        if options.only and options.only not in name:
            continue
        try:
            results += group()
        except Exception as error:  # one broken measurement must not hide the others
            results.append(Result(name, Timing(float("nan"), float("nan")), None, "s", f"failed: {error!r}"))
    took = time.perf_counter() - start
    if options.json:
        content = {
            "environment": environment(),
            "seconds": round(took, 1),
            "results": [asdict(one) | {"verdict": one.verdict} for one in results],
        }
        print(json.dumps(content, indent=2))
        return
    print(", ".join(f"{name} {value}" for name, value in environment().items()))
    print(text_of(results))
    print(f"measured in {took:.0f} s; targets are those of an idle machine with 2 cores")


if __name__ == "__main__":
    main()
    sys.exit(0)
