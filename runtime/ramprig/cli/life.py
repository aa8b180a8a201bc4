"""`ramprig life TIME...`: how long the samples of a test live, from those that failed and those that did not."""

from __future__ import annotations

import argparse
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from ramprig.cli.say import say
from ramprig.errors import FileError, Place, UsageError

if TYPE_CHECKING:
    from ramprig.endure.life import Weibull

TIMES_MAX = 100_000
"""Most samples of one estimate."""
SHAPES = (0.1, 100.0)
"""Shapes that are taken as known: outside of these a slip of the pen."""
OUTCOMES = {"failed": False, "suspended": True}
HEADS = ("time", "outcome")
EPILOG = """A time alone is a failure, one with a + behind it a suspension: a sample taken out, or still whole, at that
time. A CSV file has the columns time and outcome (failed or suspended), and count where one line stands for several.

  ramprig life 5400 18700 21600 24000+ 24000+
  ramprig life --file vents.csv --share '1 %'
  ramprig life --plan 20000 --reliability '90 %' --confidence '90 %' --samples 8 --shape 1.8"""


@dataclass(frozen=True, slots=True)
class Times:
    """What is known: times to failure, and times without one."""

    failures: tuple[float, ...]
    suspensions: tuple[float, ...]


def declare(parser: argparse.ArgumentParser) -> None:
    """The times or their file, or what to plan."""
    parser.add_argument("times", nargs="*", metavar="TIME", help="a failure, or a suspension with + behind it")
    parser.add_argument("--file", type=Path, metavar="CSV", help="take the times from a file")
    parser.add_argument("--unit", default="cycles", help="what the times count, for the words (default: cycles)")
    parser.add_argument("--share", default="10 %", metavar="PCT", help="time by which so many failed (default: 10 %%)")
    parser.add_argument("--confidence", default="90 %", metavar="PCT", help="of bounds and plans (default: 90 %%)")
    parser.add_argument("--shape", type=float, metavar="B", help="a Weibull shape known from earlier failures")
    parser.add_argument("--plan", type=float, metavar="LIFE", help="plan a test that shows this life")
    parser.add_argument("--reliability", default="90 %", metavar="PCT", help="to be shown at LIFE (default: 90 %%)")
    parser.add_argument("--failures", type=int, default=0, metavar="N", help="failures that the plan allows")
    parser.add_argument("--samples", type=int, metavar="N", help="samples there are; needs --shape")
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Estimate or plan; returns 0. Raises UsageError where the times tell nothing."""
    if args.shape is not None and not SHAPES[0] <= args.shape <= SHAPES[1]:
        bounds = f"between {SHAPES[0]:g} and {SHAPES[1]:g}"
        raise UsageError(f"--shape {args.shape:g}: a Weibull shape lies {bounds}; worn-out parts have 1.5 to 4")
    if args.plan is not None:
        if args.times or args.file:
            raise UsageError("--plan is for a test to come: give it alone, or the times without it")
        figures, lines = _planned(args)
    else:
        if args.samples is not None or args.failures:
            raise UsageError("--samples and --failures are for a test to come: give --plan with them")
        times = _times_of(args)
        fitted = len(set(times.failures)) >= 2 and args.shape is None
        figures, lines = _fitted(times, args) if fitted else _shown(times, args)
    if args.json:
        say(json.dumps(figures, allow_nan=False, indent=2), as_is=True)
        return 0
    for line in lines:
        say(line)
    return 0


# ---- what is given ---------------------------------------------------------------------------------------------------


def share_of(text: str, option: str) -> float:
    """A share above 0 and below 1 from `90 %`, `90%` or `0.9`. Raises UsageError."""
    number, percent, rest = text.partition("%")
    try:
        share = float(number) / (100.0 if percent else 1.0)
    except ValueError:
        share = 0.0
    if rest.strip() or not 0.0 < share < 1.0:
        raise UsageError(f"{option} {text}: write a share between 0 and 100 %, such as {option} '90 %'")
    return share


def _times_of(args: argparse.Namespace) -> Times:
    if bool(args.times) == bool(args.file):
        raise UsageError("give the times of the samples, such as 'ramprig life 5400 18700 24000+', or --file CSV")
    if args.file:
        return read_times(args.file)
    failures: list[float] = []
    suspensions: list[float] = []
    for text in args.times:
        time = _time(text.removesuffix("+"))
        if time is None:
            raise UsageError(f"'{text}' is no time: write a number above 0, with + behind it for a suspension")
        (suspensions if text.endswith("+") else failures).append(time)
    return Times(tuple(failures), tuple(suspensions))


def _time(text: str) -> float | None:
    try:
        value = float(text) if "_" not in text else 0.0
    except ValueError:
        return None
    return value if 0.0 < value < float("inf") else None


def read_times(path: Path) -> Times:
    """The times of a CSV file with the columns time, outcome and perhaps count. Raises FileError with the line."""
    import csv

    from ramprig.quantity import quoted

    times: dict[bool, list[float]] = {False: [], True: []}
    try:
        with open(path, encoding="utf-8-sig", newline="") as file:
            rows = csv.DictReader(file)
            heads = rows.fieldnames or ()
            twice = next((head for head in heads if heads.count(head) > 1), None)
            if twice is not None:
                raise FileError(f"the column {quoted(twice)} stands twice", wanted="once", place=Place(str(path), 1, 1))
            if not set(HEADS) <= set(heads):
                raise FileError(
                    f"the columns are {', '.join(heads) or 'none'}",
                    wanted="time and outcome are wanted, and count if a line stands for several samples",
                    place=Place(str(path), 1, 1),
                )
            for row in rows:
                _take_row(row, times, Place(str(path), rows.line_num, 1))
    except (OSError, ValueError, csv.Error) as error:
        raise FileError(f"{path} cannot be read as times: {error}") from error
    if not any(times.values()):
        raise FileError(f"{path} holds no samples", wanted="a line for each of them is wanted below the heads")
    return Times(tuple(times[False]), tuple(times[True]))


def _take_row(row: Mapping[str | None, str | None], times: dict[bool, list[float]], place: Place) -> None:
    from ramprig.quantity import quoted

    time, outcome, count = _time(row["time"] or ""), (row["outcome"] or "").strip(), (row.get("count") or "1").strip()
    if None in row:
        raise FileError("there are more fields than heads", wanted="a number has no comma in it", place=place)
    if time is None:
        raise FileError(f"the time is {quoted(row['time'] or '')}", wanted="a number above 0 is wanted", place=place)
    if outcome not in OUTCOMES:
        raise FileError(
            f"the outcome is {quoted(outcome)}", wanted=f"one of {', '.join(OUTCOMES)} is wanted", place=place
        )
    known = sum(map(len, times.values()))
    if not (count.isascii() and count.isdigit()) or not 1 <= int(count) <= TIMES_MAX - known:
        raise FileError(f"the count is {quoted(count)}", wanted=f"1 or more, {TIMES_MAX} samples in all", place=place)
    times[OUTCOMES[outcome]] += [time] * int(count)


# ---- what comes of it ------------------------------------------------------------------------------------------------

Figures = dict[str, float | int | str | None]


def _counted(times: Times) -> str:
    from ramprig.endure.life import counted

    count = counted(len(times.failures) + len(times.suspensions), "sample")
    return f"{count}: {len(times.failures)} failed, {len(times.suspensions)} suspended"


def _fitted(times: Times, args: argparse.Namespace) -> tuple[Figures, list[str]]:
    """Weibull by maximum likelihood, and the life with likelihood-ratio bounds."""
    from ramprig.endure.life import fit_weibull, in_figures, likelihood_bounds
    from ramprig.quantity import digits

    share, confidence = share_of(args.share, "--share"), share_of(args.confidence, "--confidence")
    fit = fit_weibull(times.failures, times.suspensions)
    low, high = likelihood_bounds(fit, share, confidence=confidence)
    one_sided = 50.0 + 50.0 * confidence
    name, sure = f"B{100.0 * share:g}", f"with {100.0 * confidence:g} % confidence"
    life, least, most = (in_figures(value) for value in (fit.life(share), low, high))
    figures: Figures = {
        "samples": len(times.failures) + len(times.suspensions), "failures": len(times.failures), "unit": args.unit,
        "shape": fit.shape, "shape_sd": fit.shape_sd, "scale": fit.scale, "scale_sd": fit.scale_sd, "share": share,
        "life": fit.life(share), "confidence": confidence, "low": low, "high": high,
    }  # fmt: skip
    lines = [
        _counted(times),
        f"Weibull shape    {digits(fit.shape, 3)}  (standard uncertainty {digits(fit.shape_sd, 2)}; {meaning(fit)})",
        f"Weibull scale    {in_figures(fit.scale)} {args.unit}  (standard uncertainty {in_figures(fit.scale_sd)}; "
        "by then 63.2 % have failed)",
        f"{name:<16} {life} {args.unit}, between {least} and {most} {sure}",
        f"So {100 * (1 - share):g} % live longer than {least} {args.unit} with {one_sided:g} % confidence.",
        "Maximum likelihood, bounds by the likelihood ratio; two parameters, one cause of failure taken for granted.",
    ]
    if len(times.failures) < 5:
        lines.append("With fewer than 5 failures the shape comes out too high: rely on the bounds.")
    return figures, lines


def meaning(fit: Weibull) -> str:
    """What the shape says, where its uncertainty lets it: that of its logarithm, which is nearer to normal."""
    factor = math.exp(2.0 * fit.shape_sd / fit.shape)
    if fit.shape / factor > 1.0:
        return "above 1: they wear out"
    if fit.shape * factor < 1.0:
        return "below 1: early failures"
    return "it may be 1: failures by chance are not ruled out"


def _shown(times: Times, args: argparse.Namespace) -> tuple[Figures, list[str]]:
    """What failures that tell no shape show: none, one, or several at one time, with the shape taken as known."""
    from ramprig.endure.life import fit_weibull, in_figures, reliability_shown, weibayes

    share, confidence = share_of(args.share, "--share"), share_of(args.confidence, "--confidence")
    count, failed = len(times.failures) + len(times.suspensions), len(times.failures)
    figures: Figures = {
        "samples": count, "failures": failed, "unit": args.unit, "confidence": confidence, "shape": args.shape,
    }  # fmt: skip
    if args.shape is not None:
        if len(set(times.failures)) > 1:
            raise UsageError(f"{failed} failures tell the shape themselves: leave --shape away")
        scale = weibayes((*times.failures, *times.suspensions), failed, shape=args.shape, confidence=confidence)
        life = scale * (-math.log1p(-share)) ** (1.0 / args.shape)
        figures |= {"scale_at_least": scale, "share": share, "life_at_least": life}
        text = f"With a Weibull shape of {args.shape:g} taken as known, {100 * (1 - share):g} % live longer than"
        return figures, [
            _counted(times),
            f"{text} {in_figures(life)} {args.unit} with {100 * confidence:g} % confidence.",
        ]
    if failed:
        fit_weibull(times.failures, times.suspensions)  # which says why it cannot be, and what to do
    least = min(times.suspensions)
    shown = reliability_shown(samples=count, failures=0, confidence=confidence)
    figures |= {"time": least, "reliability": shown}
    text = f"None failed by {least:g} {args.unit}: at least {100 * shown:.3g} % live that long"
    return figures, [_counted(times), f"{text}, with {100 * confidence:g} % confidence."]


def _planned(args: argparse.Namespace) -> tuple[Figures, list[str]]:
    """How many samples, and how long."""
    from ramprig.endure.life import in_figures, plan

    if args.failures < 0 or (args.samples is not None and args.samples < 1):
        raise UsageError("--failures is 0 or more and --samples 1 or more")
    found = plan(
        life=args.plan,
        reliability=share_of(args.reliability, "--reliability"),
        confidence=share_of(args.confidence, "--confidence"),
        failures=args.failures,
        samples=args.samples,
        shape=args.shape,
    )
    figures: Figures = {
        "samples": found.samples, "time_each": found.time_each, "unit": args.unit, "life": found.life,
        "reliability": found.reliability, "confidence": found.confidence, "failures": found.failures,
        "shape": found.shape,
    }  # fmt: skip
    total = f"That is {in_figures(found.samples * found.time_each)} {args.unit} in all."
    return figures, [f"{found}.", total]
