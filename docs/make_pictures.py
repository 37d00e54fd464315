"""Makes the README's picture: a rehearsal, its page, a headless browser's screenshot of it.

Run ``.venv/bin/python docs/make_pictures.py``; needs the package ``chromium``.
"""

from __future__ import annotations

import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

ROOT = Path(__file__).parents[1]
WIDTH, HEIGHT = 1100, 2050
REHEARSE = [
    "rehearse", "examples/pre_post.toml", "--seed", "3",
    "--faults", "creep_ms=3,misses=8,doublets=3", "--out",
]  # fmt: skip
HEADLESS = [
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--hide-scrollbars",
]  # fmt: skip


def main() -> None:
    """Write docs/page.png."""
    browser = shutil.which("chromium")
    if browser is None:
        sys.exit("The package chromium is needed for the picture.")
    with tempfile.TemporaryDirectory() as folder:
        out = Path(folder) / "out"
        subprocess.run(
            [sys.executable, "-m", "rigctl", *REHEARSE, str(out)],
            check=True, cwd=ROOT, stdout=subprocess.DEVNULL,
        )  # fmt: skip
        subprocess.run(
            [browser, *HEADLESS, f"--user-data-dir={folder}/profile",
             f"--window-size={WIDTH},{HEIGHT}", f"--screenshot={ROOT / 'docs/page.png'}",
             (out / "report.html").as_uri()],
            check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
        )  # fmt: skip


if __name__ == "__main__":
    main()
