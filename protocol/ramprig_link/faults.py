"""Every exception this package raises on purpose."""

from __future__ import annotations


class LinkFault(Exception):
    """Root of the package's exceptions."""


class FieldError(LinkFault):
    """A field is not spelt as its kind asks: `found` is what stands there, `wanted` what would be right."""

    def __init__(self, found: str, *, wanted: str) -> None:
        self.found = found
        self.wanted = wanted
        super().__init__(f"{found!r} is not {wanted}")


class SampleFault(LinkFault):
    """A sample payload cannot be decoded; `why` tells what is wrong with it."""

    def __init__(self, why: str) -> None:
        self.why = why
        super().__init__(why)


class LinkBusy(LinkFault):
    """A request is outstanding, so a new one cannot be sent: wait for its answer or its end first."""


class LinkSilent(LinkFault):
    """The device has not answered the request `word` (tag `tag`) sent at `sent_s` and repeated `repeats` times."""

    def __init__(self, *, tag: int, word: str, sent_s: float, repeats: int) -> None:
        self.tag = tag
        self.word = word
        self.sent_s = sent_s
        self.repeats = repeats
        super().__init__(f"no answer to `{word}` (tag {tag:02x}) after {repeats} repeats")


class LinkMisuse(LinkFault):
    """The caller has broken the contract of a link: a bug on this side of the line."""
