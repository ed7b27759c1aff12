"""Runs every benchmark of this folder, one after the other, and prints their tables.

Each benchmark is a script of its own with a `main(argv) -> int`; 0 means that every wanted figure was reached. Fails
where there is no benchmark: a figure that nobody measured was not reached.
"""

from __future__ import annotations

import runpy
import sys
import time
from pathlib import Path

HERE = Path(__file__).resolve().parent


def main() -> int:
    scripts = [s for s in sorted(HERE.glob("*.py")) if s.name != "run.py" and not s.name.startswith("_")]
    if not scripts:
        print("no benchmark exists: nothing was measured")
        return 1
    missed = []
    for script in scripts:
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
