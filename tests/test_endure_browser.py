"""The door sheet in a real browser: one sheet of paper, A4 or Letter, however much is said, and nothing cut off."""

from __future__ import annotations

import re
from datetime import UTC
from pathlib import Path

import pytest

from browser import CHROMIUM, WHY_NOT, chromium, sheets_mm
from ramprig.bench import bench_of_text
from ramprig.endure.doorsheet import door_sheet
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.reading import read_sequence

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"
PROBE = """<script>addEventListener("load",()=>{const out=[...document.querySelectorAll("body *")].filter(e=>
e.scrollWidth>e.clientWidth+1||e.getBoundingClientRect().right>innerWidth+1).length;
document.title=`wide=${document.documentElement.scrollWidth} of=${innerWidth} out=${out}`})</script>"""
MUCH = """sequence: all that a night may hold, with a name that goes on for longer than anybody would wish it to
about: Opens, closes, waits and checks, again and again, and says at length what for and by whom it was asked for.
on interruption: {{resume at most: 3, within: 5 min}}
steps:
{blocks}
"""
BLOCK = """  - cycle:
      name: opening and closing number {number} of the vent
      times: 400
      rest: 20 s
      starts per hour: 100
      wear:
        limits:
          - {{feature: steady current, of: vent, fail: +25 %}}
          - {{feature: steady speed, of: vent, fail: -15 %}}
      steps:
        - ramp: {{motor: vent, to: 60 %, in: 800 ms}}
        - hold: 4 s
        - expect: {{current of: vent, is: at most 1.{number} A, over: 1 s}}
        - expect: {{speed of: vent, is: 38.{number} rpm +- 10 %, over: 500 ms}}
        - confirm: {{position of: vent, is: at least 50{number} deg}}
        - coast: {{motor: vent, in: 800 ms}}
"""

pytestmark = [pytest.mark.process, pytest.mark.skipif(not CHROMIUM, reason=WHY_NOT)]


@pytest.fixture(scope="module", params=["vent night", "much"])
def page(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("sheet")
    path = SCRIPTS / "vent_night.yaml"
    text = (SCRIPTS / "vent_bench.yaml").read_text("utf-8")
    if request.param == "much":
        path = folder / "much.yaml"
        path.write_text(MUCH.format(blocks="".join(BLOCK.format(number=number) for number in range(1, 4))), "utf-8")
        long = "A. Miller (electrical laboratory, 3rd floor), 555 0100, at night 555 0199; then the porter, 555 0000"
        text = re.sub(r"^  contact:.*$", f'  contact: "{long}"', text, flags=re.MULTILINE)
    bench = bench_of_text(text, "bench.yaml")
    sequence = read_sequence(path)
    sheet = door_sheet(
        bench,
        sequence,
        compile_plan(sequence, bench),
        start_unix_s=1_800_000_000.0,
        latest_end_unix_s=1_800_036_000.0,
        host="lab-pc-3",
        zone=UTC,
    )
    found = folder / "door-sheet.html"
    found.write_text(sheet.html(), "utf-8")
    return found


@pytest.mark.parametrize(("name", "wide_mm", "high_mm"), [("A4", 210.0, 297.0), ("letter", 215.9, 279.4)])
def test_the_door_sheet_is_one_sheet_of_paper(
    page: Path, tmp_path: Path, name: str, wide_mm: float, high_mm: float
) -> None:
    sized = tmp_path / "sized.html"
    sized.write_text(page.read_text("utf-8").replace("@page {", f"@page {{ size: {name};"), "utf-8")
    chromium(tmp_path / "profile", f"--print-to-pdf={tmp_path / 'door.pdf'}", "--no-pdf-header-footer", sized.as_uri())
    (sheet,) = sheets_mm(tmp_path / "door.pdf")
    assert sheet == pytest.approx((wide_mm, high_mm), abs=1.0)


@pytest.mark.parametrize("width_px", [1280, 500])
def test_nothing_of_the_door_sheet_sticks_out(page: Path, tmp_path: Path, width_px: int) -> None:
    probed = tmp_path / "probed.html"
    probed.write_text(page.read_text("utf-8").replace("</head>", PROBE + "</head>"), "utf-8")
    dom = chromium(tmp_path / "profile", f"--window-size={width_px},900", "--dump-dom", probed.as_uri())
    found = re.search(r"<title>wide=(\d+) of=(\d+) out=(\d+)</title>", dom)
    assert found is not None, dom[:500]
    wide, inner, out = map(int, found.groups())
    assert wide <= inner
    assert out == 0
