"""The API process opens no device: importing it brings in no driver, no worker and no fitting."""

from __future__ import annotations

import subprocess
import sys

PROGRAM = """
import sys
import gainwright_service.api.app
found = [name for name in sys.modules if name.split(".")[0] in ("pymodbus", "scipy")
         or name.startswith(("gainwright_service.adapters", "gainwright_service.drive", "gainwright_service.worker"))]
print(found)
"""


def test_the_api_imports_no_driver_no_worker_and_no_scipy() -> None:
    done = subprocess.run([sys.executable, "-c", PROGRAM], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
