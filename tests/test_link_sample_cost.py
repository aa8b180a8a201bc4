"""What packed samples cost on the wire, against the entropy of their deltas and against decimal text."""

from __future__ import annotations

from dev.bench_codec import ENTROPY_AIM, MASK, characters_per_sample, packed, reversing_motor

from ramprig_link.samples import decode


def test_a_reversing_motor_costs_little_more_than_its_entropy_and_comes_back_whole() -> None:
    rows = reversing_motor(12_000)
    cost = characters_per_sample(rows)
    assert cost.against_entropy <= ENTROPY_AIM
    assert cost.against_text <= 0.15
    blocks = [decode(payload) for payload in packed(rows)]
    assert [row for block in blocks for row in zip(*block.columns, strict=True)] == rows
    assert {block.mask for block in blocks} == {MASK}
