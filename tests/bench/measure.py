"""Shared by the benchmarks: wall times and peak memory of a piece of code in its own process."""

from __future__ import annotations

import json
import subprocess
import sys
import time
from collections.abc import Callable
from typing import Any


def best(run: Callable[[], Any], repeats: int) -> float:
    """The shortest of several wall times, seconds."""
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        run()
        times.append(time.perf_counter() - start)
    return min(times)


def in_own_process(code: str) -> dict[str, Any]:
    """Run code that sets ``result`` (a dict); its peak resident memory comes back as ``peak``."""
    wrapped = (
        f"{code}\nimport json, re\n"
        # Not getrusage: a new process starts with the peak of the one that made it.
        "peak = re.search(r'VmHWM:\\s+(\\d+) kB', open('/proc/self/status').read())\n"
        "result['peak'] = int(peak.group(1)) * 1024\n"
        "print(json.dumps(result))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", wrapped], capture_output=True, text=True, check=True
    )
    found: dict[str, Any] = json.loads(done.stdout.splitlines()[-1])
    return found


def ring_mapping(sites: int) -> dict[str, Any]:
    """The uniform spin-½ ring as a model mapping."""
    return lattice_mapping("chain", [sites])


def lattice_mapping(name: str, size: list[int]) -> dict[str, Any]:
    """A spin-½ lattice with nearest neighbours, J = 1."""
    return {
        "format": 1,
        "energy_unit": "1",
        "bond_term": "+J S.S",
        "couplings": {"J": 1.0},
        "lattice": {"name": name, "size": size, "spin": 0.5, "couplings": {"nearest": "J"}},
    }
