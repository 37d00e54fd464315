"""A headless browser that opens a page, measures it, and says what its console said."""

from __future__ import annotations

import html
import json
import os
import re
import shutil
import subprocess
from pathlib import Path
from typing import Any

import pytest

WIDTHS = (1280, 390)
_FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--hide-scrollbars",
    "--enable-logging=stderr",
    "--v=0",
    "--virtual-time-budget=4000",
    "--window-size=1400,1000",
)

# Goes first into the copy: whatever the page would fetch is stopped and told.
_WATCH = """
<meta http-equiv="Content-Security-Policy" content="default-src 'none'; img-src data:;
 style-src 'unsafe-inline'; script-src 'unsafe-inline'">
<script>
const fetched = [];
addEventListener('securitypolicyviolation', (e) => fetched.push(e.blockedURI));
</script>
"""

# Runs inside the copy of the page: tells the frame around it what a reader would meet.
_MEASURE = """
<script>
addEventListener('load', () => {
  const style = (e) => getComputedStyle(e);
  const seen = (e) => { const b = e.getBoundingClientRect(); return b.width > 0 && b.height > 0; };
  const spill = [...document.querySelectorAll('main *:not(svg *)')].filter(e =>
    !e.closest('.wide') && !e.closest('details:not([open])') && seen(e)
    && e.getBoundingClientRect().right > innerWidth + 0.5);
  const clipped = [...document.querySelectorAll('svg')].flatMap(svg => {
    const box = svg.getBoundingClientRect();
    return [...svg.querySelectorAll('text')].filter(t => {
      const b = t.getBoundingClientRect();
      return b.left < box.left - 1 || b.right > box.right + 1
        || b.top < box.top - 1 || b.bottom > box.bottom + 1;
    }).map(t => t.textContent);
  });
  parent.postMessage({
    asked: innerWidth,
    scrollWidth: document.documentElement.scrollWidth,
    spill: spill.map(e => e.tagName + ' ' + e.textContent.slice(0, 40)),
    clipped: clipped,
    paper: style(document.body).backgroundColor,
    ink: style(document.body).color,
    card: style(document.querySelector('figure')).backgroundColor,
    quiet: style(document.querySelector('.quiet')).color,
    stamp: style(document.querySelector('.stamp') || document.body).color,
    drawn: [...document.querySelectorAll('svg text')].map(t => style(t).fill),
    smallest: Math.min(...[...document.querySelectorAll('svg')].map(svg =>
      parseFloat(style(svg.querySelector('text')).fontSize) * svg.getScreenCTM().a)),
    figures: [...document.querySelectorAll('figure')].map(f => {
      const svg = f.querySelector('svg');
      return {seen: seen(svg), role: svg.getAttribute('role'),
              label: svg.getAttribute('aria-label'),
              caption: f.querySelector('figcaption').textContent};
    }),
    fetched: fetched,
  }, '*');
});
</script>
"""

_FRAME = """<!doctype html><meta charset="utf-8"><title>measuring</title>
<link rel="icon" href="data:,"><body style="margin: 0">
<script>
const found = [];
addEventListener('message', (told) => {
  found.push(told.data);
  document.getElementById('found').textContent = JSON.stringify(found);
});
</script>
FRAMES<pre id="found"></pre>
"""


def find() -> str:
    """Return the browser's path; without one skip, but fail where CI leaves no check out."""
    path = shutil.which("chromium") or shutil.which("chromium-browser")
    if path is None:
        sentence = "The page is not checked in a browser: the package `chromium` is not installed."
        if os.environ.get("CI"):
            pytest.fail(sentence)
        pytest.skip(sentence)
    return path


def measure(page: Path, folder: Path, dark: bool) -> tuple[dict[int, dict[str, Any]], list[str]]:
    """Open a copy of ``page`` at each width.

    Returns
    -------
    found : dict
        By width: what ``_MEASURE`` tells.
    console : list of str
        Every line that the console got.
    """
    browser = find()
    folder.mkdir()
    text = page.read_text(encoding="utf-8")
    text = text.replace("<head>", "<head>" + _WATCH, 1).replace("</body>", _MEASURE + "</body>")
    (folder / "copy.html").write_text(text, encoding="utf-8")
    # A headless window has a least width; a frame has none.
    frames = "".join(
        f'<iframe src="copy.html" style="border: 0; width: {w}px; height: 900px"></iframe>'
        for w in WIDTHS
    )
    around = folder / "around.html"
    around.write_text(_FRAME.replace("FRAMES", frames), encoding="utf-8")
    done = subprocess.run(
        [
            browser,
            *_FLAGS,
            f"--blink-settings=preferredColorScheme={0 if dark else 1}",
            f"--user-data-dir={folder / 'profile'}",
            "--dump-dom",
            around.as_uri(),
        ],
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=120,
        check=True,
    )
    told = re.search(r'<pre id="found">(.*?)</pre>', done.stdout, re.DOTALL)
    assert told is not None, done.stderr
    found = {one["asked"]: one for one in json.loads(html.unescape(told[1]))}
    console = [line for line in done.stderr.splitlines() if "CONSOLE" in line]
    return found, console


def contrast(one: str, other: str) -> float:
    """Return the contrast ratio of two ``rgb(…)`` colours (WCAG 2.2, relative luminance)."""
    lighter, darker = sorted((_luminance(one), _luminance(other)), reverse=True)
    return (lighter + 0.05) / (darker + 0.05)


def _luminance(colour: str) -> float:
    channels = [int(c) / 255 for c in re.findall(r"\d+", colour)[:3]]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]
