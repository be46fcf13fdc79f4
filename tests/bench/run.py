"""Runs the benchmarks: `python tests/bench/run.py [NAME]`, where NAME is a bench's name or how it begins.

Every figure is one JSON object on a line: name, value, unit and what it was compared with, as ratios within one run
on one machine. Each bench is a function in a module of this folder, listed in BENCHES.
"""

from __future__ import annotations

import importlib
import json
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

Figure = dict[str, Any]
# name -> module:function; the function yields figures whose names begin with the bench's name.
BENCHES = {
    "first": "first:demo_build",
    "engine/whole": "engine:whole",
    "engine/splat": "engine:splat",
    "engine/cycle": "engine:cycle",
    "engine/growth": "engine:growth",
    "engine/cores": "engine:cores",
    "engine/tiles": "engine:tiles",
    "memory/peak_gib": "memory:peak",
    "memory/spill": "memory:spill",
    "frame/median_ms": "frame:median",
    "frame/p95_ms": "frame:slowest",
    "frame/recolour_ms": "frame:recolour",
    "frame/blend_ms": "frame:blend",
    "frame/first_view_s": "frame:first_view",
    "frame/first_view_slow_s": "frame:first_view_slow",
    "frame/first_view_mb": "frame:first_view_size",
    "frame/code_kb": "frame:code",
    "frame/heap_growth": "frame:heap",
}


def figure(name: str, value: float, unit: str, compared: str, **more: Any) -> Figure:
    """One line of output."""
    return {"name": name, "value": round(float(value), 4), "unit": unit, "compared": compared, **more}


def chosen(name: str) -> list[str]:
    """The benches of that name, or those that begin with it, or that it begins with."""
    return [bench for bench in BENCHES if bench.startswith(name) or name.startswith(f"{bench}/")]


def main(arguments: list[str]) -> int:
    wanted = arguments[0] if arguments else ""
    names = chosen(wanted)
    if len(arguments) > 1 or not names:
        print(f"no bench is called {' '.join(arguments)}: there are {', '.join(BENCHES)}", file=sys.stderr)
        return 2
    sys.path.insert(0, str(Path(__file__).parent))
    for bench in names:
        module, function = BENCHES[bench].split(":")
        run: Callable[[], Iterator[Figure]] = getattr(importlib.import_module(module), function)
        for line in run():
            if line["name"].startswith(wanted) or bench.startswith(wanted):
                print(json.dumps(line), flush=True)
    return 0


if __name__ == "__main__":
    sys.modules["run"] = sys.modules["__main__"]
    sys.exit(main(sys.argv[1:]))
