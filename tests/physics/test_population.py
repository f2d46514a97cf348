"""Brownian motion of many droplets as a check of the scale."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS, record

from physics.droplet import diffusion, fall_speed
from physics.motion import droplet_posterior, population_diffusion


@pytest.fixture(scope="module")
def tracks():
    """Seventy droplets of 0.45 to 0.9 um."""
    rng = np.random.default_rng(1)
    return [record(rng, rng.uniform(4.5e-7, 9e-7), 5) for _ in range(70)]


def test_ratio_of_true_droplets_is_one(tracks):
    """With the right scale the ratio is 1 within its uncertainty, which is 0.8 % for seventy droplets."""
    result = population_diffusion([droplet_posterior(track.steps(), CONDITIONS) for track in tracks])
    assert result.droplets == 70
    # 7 % per droplet (Cramer-Rao at 24 s), over the root of 70
    assert result.std == pytest.approx(0.07 / np.sqrt(70), rel=0.15)
    assert abs(result.ratio - 1) < 3 * result.std


def test_a_wrong_scale_shows_with_its_power(tracks):
    """Lengths 3 % too large raise the ratio by the power 2 - dln D/dln v, about 2.6.

    Closed form: D goes as length squared, the D of the fall speed as speed to dln D/dln v = -0.57 to -0.54.
    """
    plain = population_diffusion([droplet_posterior(track.steps(), CONDITIONS) for track in tracks])
    larger = [replace(track, down=1.03 * track.down, side=1.03 * track.side) for track in tracks]
    wrong = population_diffusion([droplet_posterior(track.steps(), CONDITIONS) for track in larger])
    ends = np.array([6.5e-7 / 1.01, 6.5e-7 * 1.01])
    power = 2 - float(
        np.diff(np.log(diffusion(ends, CONDITIONS)))[0] / np.diff(np.log(fall_speed(ends, CONDITIONS)))[0]
    )
    # the same tracks: only the spread of radii about 0.65 um is left, 0.02 of the power
    assert np.log(wrong.ratio / plain.ratio) / np.log(1.03) == pytest.approx(power, abs=0.03)
    assert power == pytest.approx(2.6, abs=0.05)


def test_without_droplets_there_is_no_ratio():
    """Nothing in, NaN out."""
    result = population_diffusion([])
    assert np.isnan([result.ratio, result.std]).all()
    assert result.droplets == 0
