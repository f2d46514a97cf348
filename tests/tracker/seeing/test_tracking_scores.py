"""The tracking scores give what can be worked out by hand."""

from __future__ import annotations

import pytest
from tracking_scores import Track, score


def straight(frames: int, *, x: float = 0.0, y: float = 0.0, first: int = 0) -> Track:
    """A track that moves 1 px a frame."""
    return {first + i: (x + i, y) for i in range(frames)}


def test_shift_costs_its_share_of_the_gate():
    """A track 1 px off under a gate of 5 px has alpha = beta = 1 - 1/5."""
    s = score([straight(10)], [straight(10, y=1.0)])
    assert (s.alpha, s.beta, s.jaccard) == pytest.approx((0.8, 0.8, 1.0))
    assert s.rms == pytest.approx(1.0)


def test_spurious_track_lowers_beta_only():
    """With 4 spurious points beta = 40 / (50 + 20), and Jaccard 10 / 14 and 1 / 2."""
    s = score([straight(10)], [straight(10, y=1.0), straight(4, y=100.0)])
    assert (s.alpha, s.beta) == pytest.approx((0.8, 40 / 70))
    assert (s.jaccard, s.jaccard_tracks) == pytest.approx((10 / 14, 0.5))


def test_missing_frames_cost_the_gate():
    """Seven of ten frames, exact, give alpha = beta = Jaccard = 0.7."""
    s = score([straight(10)], [straight(7)])
    assert (s.alpha, s.beta, s.jaccard) == pytest.approx((0.7, 0.7, 0.7))


def test_beyond_the_gate_nothing_counts():
    """A track 6 px off scores nothing."""
    s = score([straight(10)], [straight(10, y=6.0)])
    assert (s.alpha, s.jaccard) == pytest.approx((0.0, 0.0))
