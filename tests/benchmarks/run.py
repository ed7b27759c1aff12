"""Runs every benchmark of this folder, one after the other, and prints their tables.

Each benchmark is a script of its own with a `main(argv) -> int`; 0 means that every wanted figure was reached.
"""

from __future__ import annotations

import runpy
import sys
import time
from pathlib import Path

HERE = Path(__file__).resolve().parent


def main() -> int:
    missed = []
    for script in sorted(HERE.glob("*.py")):
        if script.name == "run.py" or script.name.startswith("_"):
            continue
        started = time.perf_counter()
        print(f"\n=== {script.stem} ===", flush=True)
        sys.argv = [str(script)]
        try:
            runpy.run_path(str(script), run_name="__main__")
        except SystemExit as end:
            if end.code:
                missed.append(script.stem)
        print(f"--- {script.stem}: {time.perf_counter() - started:.0f} s", flush=True)
    print("\nmissed: " + ", ".join(missed) if missed else "\nevery wanted figure was reached")
    return 1 if missed else 0


if __name__ == "__main__":
    sys.path.insert(0, str(HERE.parent))
    raise SystemExit(main())
