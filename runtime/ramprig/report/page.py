"""The frame of a report: one HTML file with its style inside, nothing from a network, for the screen and for A4."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from html import escape

STYLE = """
:root{--ink:#1c2329;--soft:#55616b;--rule:#d4dade;--tint:#f4f6f7;--good:#00694b;--bad:#a83a00;--sign:#0b4f7a}
*{box-sizing:border-box}
html{-webkit-text-size-adjust:100%}
body{margin:0;color:var(--ink);background:#fff;font:15px/1.5 "Source Sans 3","Segoe UI",Roboto,"Helvetica Neue",
Arial,sans-serif}
main{max-width:52rem;margin:0 auto;padding:2.2rem 1.4rem 4rem}
h1{font-size:1.72rem;line-height:1.2;margin:.1rem 0 .3rem;font-weight:650;letter-spacing:-.01em}
h2{font-size:1.14rem;margin:2.3rem 0 .7rem;padding-top:.55rem;border-top:2px solid var(--ink);font-weight:650;
display:flex;justify-content:space-between;gap:1rem;align-items:baseline}
h2 small,.id{font:400 .72rem/1.4 ui-monospace,"DejaVu Sans Mono",Consolas,monospace;color:var(--soft);
overflow-wrap:anywhere;text-align:right}
h3{font-size:1rem;margin:1.4rem 0 .4rem;font-weight:650}
p{margin:.45rem 0;max-width:44rem}
.kicker{font-size:.78rem;letter-spacing:.08em;text-transform:uppercase;color:var(--soft);margin:0}
.note{color:var(--soft);font-size:.86rem}
.verdict{margin:1.2rem 0;padding:.85rem 1.1rem;border-left:6px solid var(--sign);background:var(--tint)}
.verdict p{margin:.25rem 0;max-width:none}
.verdict .word{font-size:1.2rem;font-weight:700}
.passed{border-color:var(--good)}.passed .word{color:var(--good)}
.bad{border-color:var(--bad);border-left-style:double}.bad .word{color:var(--bad)}
.differs{border:2px solid var(--bad);padding:.7rem 1rem;margin:1rem 0}
table{border-collapse:collapse;width:100%;margin:.6rem 0 1rem;font-size:.87rem;font-variant-numeric:tabular-nums}
th,td{text-align:left;vertical-align:top;padding:.3rem .7rem .3rem 0;border-bottom:1px solid var(--rule)}
th{font-weight:600;color:var(--soft);font-size:.79rem}
td.n,th.n{text-align:right}
td.ok{color:var(--good);font-weight:600;white-space:nowrap}
td.no{color:var(--bad);font-weight:700;white-space:nowrap}
td{overflow-wrap:anywhere}
td.t{white-space:nowrap;overflow-wrap:normal}
dl{display:grid;grid-template-columns:12rem 1fr;gap:.22rem 1rem;margin:.5rem 0 1rem;font-size:.92rem}
dt{color:var(--soft)}dd{margin:0;overflow-wrap:anywhere}
pre{background:var(--tint);border:1px solid var(--rule);padding:.7rem .9rem;overflow-x:auto;white-space:pre-wrap;
overflow-wrap:anywhere;font:12px/1.45 ui-monospace,"DejaVu Sans Mono",Consolas,monospace}
figure{margin:.9rem 0 1.2rem;break-inside:avoid}
figcaption{font-size:.84rem;color:var(--soft);margin-bottom:.15rem}
svg{display:block;width:100%;height:auto;font:11px "Segoe UI",Roboto,Arial,sans-serif}
svg text{fill:#333}svg text.l{fill:#55616b}svg text.e{font-size:10px;fill:#333;paint-order:stroke;stroke:#fff;
stroke-width:3px}svg .g{stroke:#e6eaec;stroke-width:1}svg .a{stroke:#8a949b;stroke-width:1}
.end{margin-top:2.5rem;border-top:2px solid var(--ink);padding-top:.6rem;text-align:center}
code{font-size:.92em}
td.p{min-width:10rem}
header .id,.named{text-align:left}
@media (max-width:34rem){main{padding:1.2rem .9rem}dl{grid-template-columns:1fr;gap:0}dd{margin-bottom:.4rem}
h2{display:block}h2 small{display:block;text-align:left}}
@media print{@page{size:A4;margin:16mm 15mm 18mm}
body{font-size:10pt}main{max-width:none;padding:0}h2{break-after:avoid;margin-top:1.5rem}h3{break-after:avoid}
tr,.verdict,dd,dt{break-inside:avoid}thead{display:table-header-group}pre{break-inside:auto;font-size:8pt}
.verdict,pre{background:#fff}}
"""
NOT_KNOWN = "not recorded"
"""In the place of what the run itself should have said; what people should have said is `not entered`."""


def text(value: object) -> str:
    """A value as HTML text; what is not there is told as `not entered`."""
    if value is None or value == "":
        return '<span class="note">not entered</span>'
    return escape(clean(str(value)))


def clean(value: str) -> str:
    """The text without control characters, which no page and no XML may hold."""
    return "".join(letter if letter in "\t\n" or (letter >= " " and letter not in "\x7f\ufffe\uffff") else "\ufffd"
                   for letter in value if not "\ud800" <= letter <= "\udfff")  # fmt: skip


def facts(pairs: Iterable[tuple[str, object]]) -> str:
    """Names and values, one a line."""
    return "<dl>" + "".join(f"<dt>{escape(name)}</dt><dd>{text(value)}</dd>" for name, value in pairs) + "</dl>"


def table(heads: Sequence[str], rows: Iterable[Sequence[str]], *, numbers: Sequence[int] = ()) -> str:
    """A table of ready HTML cells; the columns `numbers` stand right. A cell that begins with `<td` is taken whole."""
    classes = [' class="n"' if place in numbers else "" for place in range(len(heads))]
    head = "".join(f"<th{kind}>{escape(name)}</th>" for name, kind in zip(heads, classes, strict=True))
    body = []
    for row in rows:
        cells = (
            cell if cell.startswith("<td") else f"<td{kind}>{cell}</td>"
            for cell, kind in zip(row, classes, strict=True)
        )
        body.append("<tr>" + "".join(cells) + "</tr>")
    return f"<table><thead><tr>{head}</tr></thead><tbody>{''.join(body)}</tbody></table>"


def status(holds: bool) -> str:
    """A cell that says pass or fail in a sign, a word and a colour."""
    return '<td class="ok">&#10003; pass</td>' if holds else '<td class="no">&#10007; FAIL</td>'


def short(value: object) -> str:
    """A cell that stays on one line, such as a time of day."""
    return f'<td class="t">{text(value)}</td>'


def place(value: str) -> str:
    """A cell with a place in a file, which is broken after a folder where it must be."""
    return f'<td class="p"><code>{escape(clean(value)).replace("/", "/<wbr>")}</code></td>'


def alike(values: Sequence[float]) -> list[str]:
    """Numbers of one kind with the decimals that four figures of the largest have, so that what is nothing beside it
    reads as nothing."""
    size = max(abs(value) for value in values)
    decimals = max(0, 3 - math.floor(math.log10(size))) if size > 0 else 0
    return [f"{round(value, decimals) + 0.0:.{decimals}f}" for value in values]


def paragraph(sentence: str, *, kind: str = "") -> str:
    """A paragraph of plain text."""
    attribute = f' class="{kind}"' if kind else ""
    return f"<p{attribute}>{text(sentence)}</p>"


def section(number: int, title: str, report_id: str, *parts: str) -> str:
    """A numbered part, with the report's identifier on it."""
    return (
        f"<section><h2><span>{number}&ensp;{escape(title)}</span><small>{escape(report_id)}</small></h2>"
        f"{''.join(parts)}</section>"
    )


def figure(number: int, caption: str, svg: str) -> str:
    """A picture with its number."""
    return f"<figure><figcaption>Figure {number}. {text(caption)}</figcaption>{svg}</figure>"


def page(title: str, report_id: str, body: str) -> str:
    """The whole file."""
    foot = f'@media print{{@page{{@bottom-left{{content:"{_css(report_id)}";font:7.5pt monospace;color:#555}}'
    foot += '@bottom-right{content:"page " counter(page) " of " counter(pages);font:7.5pt sans-serif;color:#555}}}'
    return (
        '<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width,initial-scale=1">'
        "<meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'\">"
        f"<title>{text(title)}</title><style>{STYLE}{foot}</style></head><body><main>\n{body}\n</main></body></html>\n"
    )


def _css(value: str) -> str:
    return "".join(letter for letter in value if letter.isalnum() or letter in "-_. ")
