"""Runs every benchmark in this folder."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

HERE = Path(__file__).parent

for name in ("help", "keep_alive", "sessions", "growth"):
    print(f"--- {name}", flush=True)
    subprocess.run([sys.executable, HERE / f"{name}.py"], check=True)
