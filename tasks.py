"""What `make` does, for machines without make: python tasks.py dryrun|test|soak|bench|format.

Only the standard library is used here: this file makes the virtual environment that holds the rest.
"""

from __future__ import annotations

import hashlib
import os
import shutil
import subprocess
import sys
import sysconfig
import time
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parent
VENV = ROOT / ".venv"
BIN = VENV / ("Scripts" if os.name == "nt" else "bin")
PYTHON = BIN / ("python.exe" if os.name == "nt" else "python")


def run(*command: str | Path, env: dict[str, str] | None = None) -> None:
    """Run a command at the top of the repo; stop with its exit code when it fails."""
    printable = " ".join(Path(c).name if Path(c).is_absolute() else str(c) for c in command)
    print(f"$ {printable}", flush=True)
    code = subprocess.run(
        [str(c) for c in command], cwd=ROOT, env={**os.environ, **(env or {})}
    ).returncode
    if code:
        sys.exit(code)


def install(extras: str = "") -> None:
    """Make .venv and install this repo into it, unless that was done for these very files."""
    if sys.version_info < (3, 11):  # noqa: UP036 - this file runs before pip can check
        sys.exit(f"Python 3.11 or newer is needed; this is {sysconfig.get_python_version()}.")
    stamp = VENV / f"installed-{extras or 'plain'}"
    text = (ROOT / "pyproject.toml").read_bytes() + sys.version.encode()
    want = hashlib.sha256(text).hexdigest()
    if PYTHON.exists() and stamp.exists() and stamp.read_text() == want:
        return
    if not PYTHON.exists():
        print("$ python -m venv .venv", flush=True)
        venv.create(VENV, with_pip=True)
    target = f".[{extras}]" if extras else "."
    run(PYTHON, "-m", "pip", "install", "--quiet", "--disable-pip-version-check", "-e", target)
    stamp.write_text(want)


def need_chromium() -> None:
    """Have a headless browser for the page's check: installed where we may, else said."""
    if shutil.which("chromium") or shutil.which("chromium-browser"):
        return
    may_install = hasattr(os, "geteuid") and os.geteuid() == 0 and shutil.which("apt-get")
    if may_install:
        run("apt-get", "update", "-qq")
        run("apt-get", "install", "-y", "-qq", "--no-install-recommends", "chromium")
    else:
        print(
            "The page is not checked in a browser here: install the package `chromium` "
            "(on Debian: apt-get install chromium) to have that check too.",
            flush=True,
        )


def dryrun() -> None:
    """Rehearse the standard session and say where the page is."""
    started = time.monotonic()
    install()
    out = ROOT / "dryrun"
    if out.exists():
        shutil.rmtree(out)
    run(BIN / "pairctl", "rehearse", "examples/pre_post.toml", "--out", "dryrun", "--seed", "1")
    print(f"{time.monotonic() - started:.0f} s, set-up included. Open dryrun/report.html")


def test() -> None:
    """Everything that CI runs."""
    install("test,fast")
    need_chromium()
    run(PYTHON, "-m", "ruff", "check", ".")
    run(PYTHON, "-m", "ruff", "format", "--check", ".")
    run(PYTHON, "-m", "mypy")
    run(BIN / "lint-imports", "--no-cache")
    run(PYTHON, "-m", "pytest", "-n", "2", "-m", "not soak")


def soak() -> None:
    """The long suites in full."""
    install("test,fast")
    run(PYTHON, "-m", "pytest", "-m", "soak")


def bench() -> None:
    """The benchmarks, as ratios to a limit measured in the same run."""
    install("test,fast")
    run(PYTHON, "benchmarks/run_all.py")


def format() -> None:
    """Put the code into shape."""
    install("test,fast")
    run(PYTHON, "-m", "ruff", "check", "--fix", ".")
    run(PYTHON, "-m", "ruff", "format", ".")


TASKS = {f.__name__: f for f in (dryrun, test, soak, bench, format)}


if __name__ == "__main__":
    if len(sys.argv) != 2 or sys.argv[1] not in TASKS:
        print(__doc__)
        for name, task in TASKS.items():
            print(f"  {name:8} {task.__doc__}")
        sys.exit(2)
    TASKS[sys.argv[1]]()
