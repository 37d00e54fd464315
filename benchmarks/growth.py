"""Seconds and memory over session length, 10 min to 8 h, beside the bare loop."""

from __future__ import annotations

import tempfile
from pathlib import Path

from common import ROOT, bare_loop, session

MINUTES = (10, 30, 60, 120, 240, 480)


def main() -> None:
    """Print a line for each length."""
    text = (ROOT / "examples/pre_post.toml").read_text(encoding="utf-8")
    print("scripted cell; follow-up made longer; peak memory of the whole process")
    print(
        f"{'min':>5} {'s':>8} {'s per h':>8} {'peak MB':>8} {'events':>8} {'loop ms':>8} "
        f"{'ratio':>6}"
    )
    with tempfile.TemporaryDirectory() as folder:
        for minutes in MINUTES:
            follow_up = minutes - 12.2 if minutes > 13 else 0.5
            protocol = Path(folder) / f"p{minutes}.toml"
            longer = text.replace("duration_min = 30", f"duration_min = {follow_up}")
            if minutes <= 13:
                longer = longer.replace("duration_min = 6", "duration_min = 3")
            protocol.write_text(longer, encoding="utf-8")
            run = session(protocol, Path(folder) / f"o{minutes}")
            loop, events = bare_loop(run.record)
            print(
                f"{minutes:5} {run.seconds:8.2f} {run.seconds / minutes * 60:8.2f} "
                f"{run.peak_mb:8.0f} {events:8} {loop * 1000:8.1f} {run.seconds / loop:6.0f}"
            )
            run.record.unlink()


if __name__ == "__main__":
    main()
