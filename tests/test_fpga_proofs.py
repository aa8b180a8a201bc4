"""The proofs of the FPGA blocks: every module is in the list, its properties are labelled, hold, and bite."""

from __future__ import annotations

import shutil
from dataclasses import replace
from pathlib import Path

import pytest
import toolchain
from _pytest.mark.structures import ParameterSet
from dev import prove_gates
from dev.prove_gates import BLOCKS, Block

MISSING = toolchain.why_not(toolchain.GATES)
needs_yosys = pytest.mark.skipif(bool(MISSING), reason=MISSING)

MUTANTS = (
    (
        "rr_chain",
        "ceiling_duty > MAX_DUTY ? MAX_DUTY : ceiling_duty",
        "ceiling_duty",
        "S1: the board's own greatest duty",
    ),
    ("rr_chain", "value < -$signed({1'b0, bound})", "1'b0", "S1: a ceiling on one side"),
    ("rr_chain", "rise > slew_up_duty ? size + slew_up_duty", "rise > slew_up_duty ? wanted_size", "S2"),
    ("rr_chain", "zero_ticks >= dwell_ticks && still", "zero_ticks >= dwell_ticks", "S3: standstill"),
    ("rr_chain", "moved_yet && last_negative == negative", "last_negative == negative", "S3: the first start"),
    ("rr_chain", "crossing ? 15'sd0 : target", "target", "S3: through zero"),
    (
        "rr_chain",
        "            if (next_duty != 0) begin",
        "            begin",
        "S3: the last sign is kept while at zero",
    ),
    ("rr_chain", "zero_ticks    <= 16'd0;", "zero_ticks    <= 16'd9999;", "S3: the dwell of the first start"),
    ("rr_standstill", "away <= $signed({17'd0, still_counts}) && ", "", "a shaft that runs forwards is not still"),
    ("rr_standstill", "stayed ? mark : counts", "mark", "counts that come back are no standstill"),
    ("rr_quadrature", "upwards ? counts + 32'd1 : counts - 32'd1", "counts + 32'd1", "direction"),
    ("rr_quadrature", "a_for == FILTER - 1) held[1]", "a_for == 0) held[1]", "the filter"),
    ("rr_quadrature", "b_for == FILTER - 1) held[0]", "b_for == 0) held[0]", "the filter of B"),
    ("rr_bridge", "here < held && ", "", "S1: a leg at full"),
    ("rr_bridge", "wraps ? duty : held", "duty", "a pulse that changes on its way"),
    ("rr_bridge", "b_ago == DEAD && !leg_b", "!leg_b", "the pause between the legs"),
    ("rr_bridge", "if (rst || !on)", "if (rst)", "off is off"),
    ("rr_servo", "above > slew_ns ? here + slew_ns : goal", "goal", "S7: slew"),
    ("rr_servo", "value > greatest ? greatest : value", "value", "S7: the upper end"),
    ("rr_lease", "next_silent >= lease_ticks", "next_silent > lease_ticks", "S4: one tick late"),
    ("rr_lease", "renewed <= !tick && (renewed || renew)", "renewed <= renewed || renew", "S4: renewed for ever"),
    ("rr_overcurrent", "next_over >= {6'd0, trip_ticks}", "next_over > {6'd0, trip_ticks}", "TRIP-3: one tick late"),
    ("rr_overcurrent", " || current_ma < -$signed({1'b0, trip_ma})", "", "a current the other way"),
    ("rr_crc16", "{4'd0, leaving[7:4]}", "{5'd0, leaving[7:5]}", "the check"),
    ("rr_line", "wire fits    = {1'b0, length}", "wire fits    = {2'b0, length[5:0]}", "a line of 90 bytes"),
    ("rr_uart_tx", "bits == 4'd1 ? 1'b1 : shift[0]", "shift[1]", "the order of the bits"),
    ("rr_lease", "silent_ticks == 16'hffff ?", "silent_ticks == 16'hfff0 ?", "S4: the longest leases"),
    ("rr_interlock", "arm && !disarm && may_arm", "arm && may_arm", "armed by a clock that disarms too"),
    ("rr_interlock", ".current_ma(current_ma)", ".current_ma(18'sd0)", "TRIP-3: the current is not looked at"),
    ("rr_interlock", "over     ? `RR", "1'b0 ? `RR", "TRIP-3: found and not acted on"),
    ("rr_interlock", " && demand == 0 && duty == 0;", " && demand == 0;", "armed again with the old duty"),
    ("rr_interlock", "clear && may_clear && !armed", "clear && !armed", "S5: cleared while the cause persists"),
    (
        "rr_interlock",
        "if (armed && found != `RR_TRIP_NONE) trip",
        "if (found != `RR_TRIP_NONE) trip",
        "a trip's word changes",
    ),
)
"""Module, what stands in it, the fault put in its place, what the fault breaks."""
SLOW = ("rr_interlock", "S1: the board's own greatest duty")
"""Module or fault whose refusal takes more than some seconds: a soak."""


def case(mutant: tuple[str, str, str, str]) -> ParameterSet:
    """One fault under its name, a soak where it is slow."""
    slow = mutant[0] in SLOW or mutant[3] in SLOW
    return pytest.param(*mutant, id=f"{mutant[0]}-{mutant[3]}", marks=[pytest.mark.soak] if slow else [])


def test_every_module_is_in_the_list_of_blocks() -> None:
    assert sorted(path.stem for path in prove_gates.FPGA.glob("rr_*.v")) == sorted(block.name for block in BLOCKS)


@pytest.mark.parametrize("block", BLOCKS, ids=lambda block: block.name)
def test_every_module_has_properties_and_covers_with_labels(block: Block) -> None:
    named = prove_gates.properties(block.name)
    assert named["assert"]
    assert named["cover"]


def test_a_property_without_a_label_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "rr_x.v").write_text("module rr_x;\n    assert (1);\nendmodule\n", "ascii")
    monkeypatch.setattr(prove_gates, "FPGA", tmp_path)
    with pytest.raises(ValueError, match=r"rr_x\.v:2: assert without a label"):
        prove_gates.properties("rr_x")


@needs_yosys
@pytest.mark.parametrize("block", BLOCKS, ids=lambda block: block.name)
def test_all_properties_of_a_block_are_proved_and_all_covers_reached(block: Block) -> None:
    found = prove_gates.examine(block)
    assert found.holds, found.line


COUNTER = """module rr_x (input clk);
    reg [1:0] here = 2'd0;
    always @(posedge clk) begin
        here <= here == 2'd2 ? 2'd0 : here + 2'd1;
        c_two: cover (here == 2'd2);
        c_three: cover (here == 2'd3);
    end
endmodule
"""


@needs_yosys
@pytest.mark.parametrize("at_once", [False, True])
def test_a_cover_that_cannot_be_reached_or_not_so_soon_is_not_reached(
    at_once: bool, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "rr_x.v").write_text(COUNTER, "ascii")
    shutil.copy(prove_gates.FPGA / prove_gates.COVER_MAP, tmp_path)
    monkeypatch.setattr(prove_gates, "FPGA", tmp_path)
    enough = Block("rr_x", cover_clocks=5, at_once=at_once)
    assert prove_gates.reach(enough, "c_two")
    assert not prove_gates.reach(enough, "c_three")
    assert not prove_gates.reach(replace(enough, cover_clocks=2), "c_two")


@needs_yosys
@pytest.mark.parametrize(("name", "sound", "faulty", "breaks"), [case(mutant) for mutant in MUTANTS])
def test_a_fault_put_into_a_block_is_not_proved(
    name: str, sound: str, faulty: str, breaks: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for path in prove_gates.FPGA.glob("*.v*"):
        shutil.copy(path, tmp_path)
    text = (tmp_path / f"{name}.v").read_text("ascii")
    design, mark, claims = text.partition("`ifdef FORMAL")
    assert design.count(sound) == 1, f"{sound} stands {design.count(sound)} times in {name}.v"
    (tmp_path / f"{name}.v").write_text(design.replace(sound, faulty) + mark + claims, "ascii")
    monkeypatch.setattr(prove_gates, "FPGA", tmp_path)
    block = next(block for block in BLOCKS if block.name == name)
    assert not prove_gates.prove(block), breaks
