"""A headless Chromium for tests of pages: load, measure, photograph, and see what it asks for.

Only the plain command line is used: ``--dump-dom``, ``--screenshot``, ``--log-net-log``.
"""

from __future__ import annotations

import html
import json
import re
import subprocess
import tempfile
from pathlib import Path
from typing import Any

CHROMIUM = Path("/usr/bin/chromium")
MISSING = f"{CHROMIUM} is not there (Debian: apt-get install chromium)"

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
)

# hands what a reader would see to the page around, where --dump-dom finds it
_MEASURE = """
<script>
addEventListener("load", () => {
  const box = (e) => { const r = e.getBoundingClientRect();
    return [r.left, r.top + scrollY, r.right, r.bottom + scrollY]; };
  const rects = [];
  const walk = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
  while (walk.nextNode()) {
    const node = walk.currentNode;
    if (!node.data.trim() || node.parentElement.closest("svg, script, style")) continue;
    const range = document.createRange();
    range.selectNodeContents(node);
    for (const r of range.getClientRects())
      rects.push({key: node, words: node.data.trim().slice(0, 40), scope: "page",
                  r: [r.left, r.top, r.right, r.bottom]});
  }
  for (const svg of document.querySelectorAll("svg"))
    for (const g of svg.querySelectorAll("g[id*='-text_']")) {
      const r = g.getBoundingClientRect();
      rects.push({key: g, words: g.id, scope: svg, r: [r.left, r.top, r.right, r.bottom]});
    }
  const overlaps = [];
  for (let i = 0; i < rects.length; i++)
    for (let j = i + 1; j < rects.length; j++) {
      const a = rects[i], b = rects[j];
      if (a.key === b.key || a.scope !== b.scope) continue;
      const w = Math.min(a.r[2], b.r[2]) - Math.max(a.r[0], b.r[0]);
      const h = Math.min(a.r[3], b.r[3]) - Math.max(a.r[1], b.r[1]);
      if (w > 1 && h > 1) overlaps.push([a.words, b.words]);
    }
  const found = {
    width: innerWidth,
    wide: document.documentElement.scrollWidth,
    tall: document.documentElement.scrollHeight,
    headings: [...document.querySelectorAll("h1, h2, h3")].map(
      (e) => [e.tagName, e.textContent, box(e)]),
    figures: [...document.querySelectorAll("figure svg")].map(box),
    texts: rects.length,
    overlaps: overlaps,
  };
  parent.postMessage(JSON.stringify(found), "*");
});
</script>
"""

# a browser's window is at least 500 pixels wide, a frame in it is not
_FRAME = """<!DOCTYPE html>
<script>
addEventListener("message", (event) => {
  const out = document.createElement("pre");
  out.id = "measured";
  out.textContent = event.data;
  document.body.append(out);
});
</script>
<body><iframe src="%s" width="%d" height="900" style="border: 0"></iframe>
"""


def run(
    page: Path, *more: str, width: int = 1400, height: int = 900
) -> subprocess.CompletedProcess[str]:
    """Open a file in a fresh browser."""
    with tempfile.TemporaryDirectory() as profile:
        return subprocess.run(
            [
                str(CHROMIUM),
                *_FLAGS,
                f"--user-data-dir={profile}",
                f"--window-size={width},{height}",
                *more,
                page.as_uri(),
            ],
            capture_output=True,
            text=True,
            timeout=120,
            check=True,
        )


def console(page: Path, netlog: Path) -> tuple[str, list[str], list[str]]:
    """Load a page: its DOM, what it wrote to the console, and what it asked the network for."""
    done = run(page, "--dump-dom", f"--log-net-log={netlog}")
    lines = [line for line in done.stderr.splitlines() if "CONSOLE" in line]
    asked = []
    for event in json.loads(netlog.read_text())["events"]:
        given = event.get("params", {})
        # what the browser asks for on its own account has no page as initiator
        if "url" in given and given.get("initiator", "not an origin") != "not an origin":
            asked.append(given["url"])
    return done.stdout, lines, asked


def measured(page: Path, copy: Path, width: int) -> dict[str, Any]:
    """Lay a page out at a width: sizes, headings, figures, and texts that overlap.

    A page that forbids scripts cannot be measured, so a copy with neither rule is.
    """
    text = re.sub(
        r'<meta http-equiv="Content-Security-Policy"[^>]*>', "", page.read_text(encoding="utf-8")
    )
    copy.write_text(text.replace("</body>", f"{_MEASURE}</body>"), encoding="utf-8")
    around = copy.with_name(f"around-{copy.name}")
    around.write_text(_FRAME % (copy.name, width), encoding="utf-8")
    dom = run(around, "--dump-dom", "--virtual-time-budget=5000").stdout
    found = re.search(r'<pre id="measured">(.*?)</pre>', dom, flags=re.DOTALL)
    assert found is not None, "the page was not measured"
    result: dict[str, Any] = json.loads(html.unescape(found[1]))
    return result


def photograph(page: Path, picture: Path, width: int, height: int) -> Path:
    """A picture of the top `height` pixels of a page."""
    run(page, f"--screenshot={picture}", width=width, height=height)
    return picture
