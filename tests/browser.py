"""A real browser without a window, for tests that look at a page as it is drawn and printed."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

CHROMIUM = next(
    (path for name in ("chromium", "chromium-browser", "google-chrome") if (path := shutil.which(name))), ""
)
WHY_NOT = "needs a browser: the Debian package chromium"
WAIT_S = 120
FLAGS = (
    *("--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run"),
    *("--disable-background-networking", "--disable-component-update", "--disable-sync"),
)
MM_A_POINT = 25.4 / 72


def chromium(profile: Path, *arguments: str) -> str:
    """Start it with a profile of its own; what it printed."""
    done = subprocess.run(
        [CHROMIUM, *FLAGS, f"--user-data-dir={profile}", *arguments],
        capture_output=True,
        text=True,
        timeout=WAIT_S,
        check=True,
    )
    return done.stdout


def sheets_mm(paper: Path) -> list[tuple[float, float]]:
    """Width and height of each page of a printed file, in mm."""
    boxes = re.findall(rb"/MediaBox ?\[0 0 ([\d.]+) ([\d.]+)\]", paper.read_bytes())
    return [(float(width) * MM_A_POINT, float(height) * MM_A_POINT) for width, height in boxes]
