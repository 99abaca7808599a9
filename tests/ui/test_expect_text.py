"""The text of `benchkit expect`: whole, narrow, and saying what the figures say."""

from __future__ import annotations

import pytest

from benchkit.errors import ModelError
from benchkit.stage.bias_cost import bias_report
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, parse_design
from benchkit.stage.expected import expected_json
from benchkit.stage.trimmer import full_rails, open_wiper
from benchkit.stage.trimmer_report import trimmer_report
from benchkit.ui import expect_text
from benchkit.ui.expect_text import COLUMNS, bias_lines, expect_lines, table_lines, trimmer_lines
from tests.stage.catalogue import Wanted, few, text
from tests.stage.designs import TERN, changed, tern

LOW = Condition(positive_v=15.0, negative_v=-15.0, trimmer="least")


def joined(lines: list[str]) -> str:
    """The words in one line, so that a wrapped sentence is found."""
    return " ".join(" ".join(lines).split())


def test_the_whole_text() -> None:
    lines = expect_lines(tern(), LOW, expected_json(tern(), LOW, 60), (8.0, 4.0))
    assert max(len(line) for line in lines) <= COLUMNS
    heads = [line for line in lines if line and not line.startswith(" ")]
    starts = ("Tern 40 C", "Heat", "Trimmer", "What a bias error costs")
    assert all(any(head.startswith(start) for head in heads) for start in starts)


@pytest.mark.parametrize("name", list(few()))
def test_every_block_of_every_topology_is_narrow_and_ascii(name: str) -> None:
    design = few()[name]
    lines = trimmer_lines(design, trimmer_report(design, 60))
    lines += bias_lines(bias_report(design, full_rails(design), (8.0,)))
    assert max(len(line) for line in lines) <= COLUMNS
    assert all(line.isascii() for line in lines)


def test_trimmer_of_the_demonstration() -> None:
    told = joined(trimmer_lines(tern(), trimmer_report(tern())))
    for words in (
        "500 ohm, 12 turns, in the lower arm, in series", "turn anticlockwise", "22.0 mV across an emitter resistor",
        "52 % of the travel", "when settled", "12.0 mV cold", "safe: drop 22.0 mV to 0 V",
    ):  # fmt: skip
        assert words in told


def test_an_unsafe_wiper_stands_out() -> None:
    wanted = Wanted(topology="double-emitter-follower", feed="source servo", trimmer="upper", wiring="series")
    design = parse_design(text(wanted))
    assert open_wiper(design).in_limit
    told = joined(trimmer_lines(design, trimmer_report(design, 60)))
    assert "NOT SAFE: drop 20.0 mV to" in told
    assert "the supply comes into its limit" in told


def test_no_trimmer_is_said() -> None:
    whole = TERN.read_text(encoding="utf-8")
    design = parse_design(whole[: whole.index("[spreader.trimmer]")] + whole[whole.index("[output]") :])
    told = joined(trimmer_lines(design, trimmer_report(design, 60)))
    assert "This design has none" in told
    assert "come within 10 % of the target of 22.0 mV" in told


def _bias(design: Design, **changes: object) -> str:
    return joined(bias_lines(bias_report(design, full_rails(design, **changes))))


def test_bias_of_a_follower_says_dent_and_hump() -> None:
    told = _bias(tern())
    assert "Half the target: a dent in the middle" in told
    assert "Twice the target: a hump in the middle" in told
    assert "Oliver's condition puts it at 24.0 mV" in told
    assert "ripple 8 ohm ripple 4 ohm" in told


def test_bias_of_a_feedback_pair_has_a_hump_at_half_the_usual_drop() -> None:
    design = next(d for d in few().values() if d.output.topology == "complementary-feedback-pair")
    told = _bias(design)
    assert "Half the target: a hump in the middle" in told
    assert "Oliver" not in told


def test_a_block_without_an_answer_leaves_the_others(monkeypatch: pytest.MonkeyPatch) -> None:
    def no_answer(design: Design) -> None:
        raise ModelError(f"{design.name} has no operating point at its target", "one", "Check the design file")

    monkeypatch.setattr(expect_text, "trimmer_report", no_answer)
    lines = expect_lines(tern(), LOW, expected_json(tern(), LOW, 60), (8.0,))
    told = joined(lines)
    assert "Trimmer No answer: Tern 40 has no operating point" in told
    assert "What a bias error costs, at full rails Both halves" in told


def test_a_target_that_only_a_runaway_would_meet() -> None:
    """Cold, the stage has its table; warm, its target lies beyond the least-bias end and nothing rests there."""
    design = changed(
        TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "20')
    )
    lines = trimmer_lines(design, trimmer_report(design, 60))
    told = joined(lines)
    assert "(out of reach)" in told
    assert "0.0 % anywhere on it" in told
    assert "Open wiper the model has no answer" in told
    assert "Cold to warm the model found no state of rest for both" in told
    assert max(len(line) for line in lines) <= COLUMNS


def test_a_target_that_is_met_but_not_stable() -> None:
    design = changed(
        TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.1"), ('heatsink = "1.2', 'heatsink = "3.0'),
        ('upper = "2.0 kohm 1 %"', 'upper = "1.7 kohm 1 %"'),
    )  # fmt: skip
    report = trimmer_report(design, 60)
    assert report.slope is not None
    assert report.slope.settled_drop_v_per_turn is None
    assert "it never settles" in joined(trimmer_lines(design, report))


def test_the_table_keeps_its_columns() -> None:
    lines = table_lines(expected_json(tern(), LOW, 60))
    assert lines[0].startswith("Tern 40 C, rails 15.00 V and -15.00 V, trimmer least, cold")
    (spread,) = [line for line in lines if line.startswith("spread ")]
    assert len(spread.split()) == 7


def test_a_load_without_crossover_is_said() -> None:
    told = joined(bias_lines(bias_report(tern(), full_rails(tern()), (1000.0,))))
    assert "there is no crossover to see" in told
    assert "ripples least" not in told
