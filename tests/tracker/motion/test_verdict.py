"""The registry of reasons, and the README's table that is made from it."""

from __future__ import annotations

from dataclasses import FrozenInstanceError
from pathlib import Path

import pytest

from tracker.motion.changes import STEP_THRESHOLD, SWITCH_THRESHOLD, TREND_THRESHOLD
from tracker.motion.verdict import REASONS, ordered, reasons_table, verdict_of

README = Path(__file__).parents[3] / "README.md"


def test_the_readme_table_is_that_of_the_registry():
    """Between the markers of README.md stands exactly what the registry gives."""
    text = README.read_text(encoding="utf-8")
    between = text.split("<!-- reasons:begin -->")[1].split("<!-- reasons:end -->")[0]
    assert between.strip() == reasons_table().strip()


def test_every_reason_is_whole_and_frozen():
    """Code, sentence, statistic, threshold and false-alarm rate are there; nothing can be changed."""
    assert list(REASONS) == [reason.code for reason in REASONS.values()]
    for reason in REASONS.values():
        assert reason.code.isidentifier()
        assert reason.sentence.endswith(".")
        assert all((reason.statistic, reason.threshold, reason.false_alarm_rate))
        assert reason.effect in ("note", "doubt", "reject")
        with pytest.raises(FrozenInstanceError):
            reason.effect = "note"
    with pytest.raises(TypeError):
        REASONS["new"] = REASONS["stuck"]


def test_stated_thresholds_are_those_in_use():
    """The registry's words hold the numbers that the tests compare with."""
    assert float(REASONS["charge_step"].threshold) == STEP_THRESHOLD
    assert float(REASONS["switch"].threshold) == SWITCH_THRESHOLD
    assert float(REASONS["evaporation"].threshold) == TREND_THRESHOLD


def test_the_gravest_effect_decides():
    """Notes keep, a doubt doubts, a rejection rejects."""
    assert verdict_of([]) == "keep"
    assert verdict_of(["charge_step", "neutral"]) == "keep"
    assert verdict_of(["charge_step", "switch"]) == "doubt"
    assert verdict_of(["switch", "stuck"]) == "reject"


def test_codes_are_listed_once_in_the_order_of_the_registry():
    """An unknown code is an error that lists the known ones."""
    assert ordered(["neutral", "stuck", "neutral"]) == ("stuck", "neutral")
    with pytest.raises(ValueError, match="unknown reason 'odd'"):
        ordered(["odd"])
