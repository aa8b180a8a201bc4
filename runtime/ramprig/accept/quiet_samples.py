"""Checks of logging and kept lines with the outputs off."""

from __future__ import annotations

from ramprig.accept.trial import Trial, check
from ramprig_link.messages import Answer, Data
from ramprig_link.samples import SampleBlock, channels_of, decode_data
from ramprig_link.words import CHANNELS, FLUSH_TICKS, Cap, Per

MADE, DROPPED = 6, 7
"""Places in `counters`."""
LOGGED_TICKS = 400
NEEDED = {"counts": Cap.ENCODER, "current_ma": Cap.CURRENT, "supply_mv": Cap.SUPPLY, "temperature_dc": Cap.TEMPERATURE}
NOISY = ("current_ma",)


def full_mask(trial: Trial) -> int:
    """Every channel that the board says it has."""
    who = trial.identity
    fitted = {Per.DEVICE: 1, Per.AXIS: who.axes, Per.SERVO: who.servos}
    return sum(
        1 << channel.first_bit + index * channel.step
        for channel in CHANNELS.values()
        if NEEDED.get(channel.name, Cap(0)) in who.caps
        for index in range(fitted[channel.per])
    )


def _logged(trial: Trial, period: int, mask: int, form: str, ticks: int) -> tuple[int, int, list[Data]]:
    """Log for so long; the first tick, how many samples were made, and the data lines."""
    talk, since = trial.talk, trial.talk.heard_count
    begun = trial.ok(f"log {period} {mask} {form}", "LOG-1")
    if form == "packed":
        talk.rules.logging_begins(period, mask)
    first = int(begun.fields[0])
    right = first == (begun.tick + 1) % (1 << 32)
    trial.require(right, "LOG-2", f"a log granted in tick {begun.tick} begins at {first}, not in the next tick")
    talk.listen_ticks(ticks)
    ended = trial.ok("log 0 0 packed", "LOG-1 LOG-4")
    trial.require(ended.fields[0] == "0", "LOG-2", f"the answer to the end of a log has the tick {ended.fields[0]}")
    late = [h for h in talk.since(since) if isinstance(h.message, Data)]
    answers = [h for h in talk.since(since) if isinstance(h.message, Answer) and h.message.tag == ended.tag]
    before = not answers or all(talk.heard.index(h) < talk.heard.index(answers[0]) for h in late)
    trial.require(before, "LOG-4", "a data line came after the answer that ends its log")
    return first, int(ended.fields[1]), talk.data_lines(since)


def _numbered(trial: Trial, lines: list[Data], lost: int) -> None:
    """Each line has the number after the last one's, where none was dropped."""
    numbers = [line.number for line in lines]
    wanted = [(numbers[0] + i) % 256 for i in range(len(numbers))] if numbers else []
    trial.require(lost > 0 or numbers == wanted, "KIND-1", f"the data lines have the numbers {numbers}")


def _account(trial: Trial, blocks: list[SampleBlock], first: int, period: int, mask: int, made: int, lost: int) -> None:
    """Every sample is there, where it belongs, and once."""
    ticks = [(b.first_tick + i * b.period) % (1 << 32) for b in blocks for i in range(b.rows)]
    expected = [(first + i * period) % (1 << 32) for i in range(made)]
    if lost == 0:
        text = f"{len(ticks)} samples came of {made} made, or not at first, first + period and so on"
        trial.require(ticks == expected, "LOG-3 LOG-2 DATA-9 DATA-11", text)
    else:
        trial.note(f"{lost} of {made} samples were dropped: the link is too slow for this logging")
        trial.require(len(ticks) + lost == made, "KIND-4 DATA-11", f"{len(ticks)} came, {lost} dropped, {made} made")
    wrong = [b for b in blocks if (b.period, b.mask) != (period, mask)]
    trial.require(not wrong, "DATA-1 DATA-3", "a data line has another period or mask than was asked for")


def _values(trial: Trial, blocks: list[SampleBlock], mask: int) -> None:
    """With the outputs off there is no duty, no pulse and no state bit."""
    for ref, column in zip(
        channels_of(mask), zip(*(b.columns for b in blocks), strict=True) if blocks else (), strict=False
    ):
        values = {value for part in column for value in part}
        if ref.kind in ("duty", "pulse_us", "state"):
            trial.require(values == {0}, "LOG-3 RUN-3", f"{ref.kind} {ref.index} is {sorted(values)} with all off")


@check("LOG-1 LOG-2 LOG-3 LOG-4 DATA-2 DATA-3 DATA-4 DATA-5 DATA-6 DATA-7 DATA-8 DATA-9 DATA-10 DATA-11 KIND-1 KIND-4")
def packed_log(trial: Trial) -> None:
    """Packed logs at three periods bring every sample at its tick, coded as the protocol says to the bit."""
    mask = full_mask(trial)
    for period, chosen in ((1, 1 << 18), (2, mask), (50, mask), (FLUSH_TICKS * 3, mask)):
        before = trial.counters()
        first, made, lines = _logged(trial, period, chosen, "packed", max(LOGGED_TICKS, 3 * period))
        after = trial.counters()
        counted = after[MADE] - before[MADE]
        trial.require(counted == made, "COUNT-1 LOG-2", f"the log made {made} samples, `counters` has {counted}")
        trial.require(not any(" " in line.body for line in lines), "DATA-2", "a packed log has a plain line")
        blocks = [decode_data(line.body) for line in lines if " " not in line.body]
        _numbered(trial, lines, after[DROPPED] - before[DROPPED])
        _account(trial, blocks, first, period, chosen, made, after[DROPPED] - before[DROPPED])
        _values(trial, blocks, chosen)
        long = [b for b in blocks if (b.rows - 1) * b.period > FLUSH_TICKS]
        trial.require(not long, "DATA-9", f"a line holds samples of more than {FLUSH_TICKS} ticks")


@check("LOG-1 LOG-2 LOG-3 LOG-4 DATA-1 DATA-11")
def plain_log(trial: Trial) -> None:
    """A plain log brings one line a sample, with tick, period, mask and values in decimal."""
    mask = full_mask(trial)
    before = trial.counters()
    first, made, lines = _logged(trial, 40, mask, "plain", LOGGED_TICKS)
    after = trial.counters()
    trial.require(all(" " in line.body for line in lines), "DATA-1", "a plain log has a packed line")
    blocks = [decode_data(line.body) for line in lines]
    _numbered(trial, lines, after[DROPPED] - before[DROPPED])
    _account(trial, blocks, first, 40, mask, made, after[DROPPED] - before[DROPPED])
    _values(trial, blocks, mask)


@check("LOG-1 LOG-2 LOG-4 DATA-8")
def log_after_log(trial: Trial) -> None:
    """A new log ends the old one, whose rest comes before the answer, and begins anew."""
    talk, since = trial.talk, trial.talk.heard_count
    trial.ok("log 5 262144 packed", "LOG-1")
    talk.rules.logging_begins(5, 1 << 18)
    talk.listen_ticks(37)
    begun = trial.ok("log 10 262144 packed", "LOG-1 LOG-4")
    old = [decode_data(line.body) for line in talk.data_lines(since)]
    talk.rules.logging_begins(10, 1 << 18)
    rows = sum(block.rows for block in old if block.period == 5)
    trial.require(rows == int(begun.fields[1]), "LOG-2 LOG-4", f"{rows} samples came, {begun.fields[1]} were made")
    talk.listen_ticks(250)
    trial.ok("log 0 0 packed", "LOG-1")
    new = [decode_data(line.body) for line in talk.data_lines(since)][len(old) :]
    starts = bool(new) and new[0].first_tick == int(begun.fields[0]) and new[0].period == 10
    trial.require(starts, "LOG-2 LOG-3", "the new log does not begin at its first tick")


@check("LOG-5 TAG-3 WHO-1")
def again(trial: Trial) -> None:
    """`again` brings the kept data lines letter for letter, as many as `who` says, and `gone` for others."""
    talk, keep, since = trial.talk, trial.identity.keep, trial.talk.heard_count
    trial.ok("log 10 262144 plain", "LOG-1")
    talk.listen_ticks(10 * (keep + 4) + 30)
    trial.ok("log 0 0 packed", "LOG-1")
    lines = talk.data_lines(since)
    kept = lines[-keep:] if keep else []
    for line in lines[: len(lines) - len(kept)][-2:]:
        if line.number not in {k.number for k in kept}:
            trial.refused(f"again {line.number}", "gone", "LOG-5 WHO-1")
    trial.refused(f"again {(lines[-1].number + 1) % 256}" if lines else "again 0", "gone", "LOG-5")
    for line in (kept[:1] + kept[-1:]) if len(kept) < len(lines) else kept[-1:]:
        since = talk.heard_count
        talk.rules.resent.add(line.number)
        answer = trial.ok(f"again {line.number}", "LOG-5 WHO-1")
        heard = talk.wait(lambda m: isinstance(m, Data), since, 0.6)
        right = heard is not None and heard.message == line
        trial.require(right, "LOG-5", f"`again {line.number}` did not bring the line as it was")
        since = talk.heard_count
        talk.repeat(f"again {line.number}", answer.tag)
        talk.listen_ticks(40)
        trial.require(not talk.data_lines(since), "LOG-5 TAG-3", "a repeated `again` brought the data line once more")
