"""Vertical speed of the air from Brownian motion against fall speed, over many droplets."""

from __future__ import annotations

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS, Plan, record

from physics.errors import PhysicsError
from physics.motion import air_current, free_fit


def crowd(rng, count, *, low=3e-7, high=7e-7, **options):
    """Steps of droplets of mixed radius, charge and noise."""
    return [
        record(
            rng, rng.uniform(low, high), int(rng.integers(1, 10)), plan=Plan(noise_px=rng.uniform(0.05, 0.3), **options)
        ).steps()
        for _ in range(count)
    ]  # fmt: skip


def test_thirty_droplets_give_the_air_speed_without_bias():
    """The air speed of thirty droplets, 24 s, comes out within its own uncertainty, which is at most 0.8 um/s."""
    rng = np.random.default_rng(1)
    runs = np.array(
        [air_current(crowd(rng, 30, air_speed=3e-6), CONDITIONS, prior_std=3e-5) for _ in range(16)]
    )
    assert runs[:, 1].max() < 0.8e-6
    pull = (runs[:, 0] - 3e-6) / runs[:, 1]
    # 16 runs: mean to 0.25, spread to 18 %; 3 and 2.5 standard deviations
    assert abs(pull.mean()) < 0.75
    assert pull.std() == pytest.approx(1.0, abs=0.45)


def test_many_droplets_do_not_add_up_a_bias():
    """With 150 droplets in one call the error stays within three of the smaller uncertainty."""
    speed, std = air_current(crowd(np.random.default_rng(2), 150, seconds=12.0), CONDITIONS, prior_std=3e-5)
    assert std < 0.5e-6
    assert abs(speed) < 3 * std


def test_one_large_droplet_leaves_the_prior_as_it_was():
    """At 1.5 um diffusion says nothing of a drift of 3 um/s: mean near 0, uncertainty that of the prior."""
    one = crowd(np.random.default_rng(3), 1, low=1.5e-6, high=1.51e-6)
    speed, std = air_current(one, CONDITIONS, prior_std=3e-6)
    assert std == pytest.approx(3e-6, rel=0.05)
    assert abs(speed) < 1e-6


def test_a_narrow_prior_is_kept():
    """A prior much narrower than what the droplets say comes back."""
    speed, std = air_current(crowd(np.random.default_rng(4), 5), CONDITIONS, prior_std=1e-8)
    assert std == pytest.approx(1e-8, rel=0.01)
    assert abs(speed) < 1e-9


def test_no_droplet_gives_the_prior():
    """Nothing to go by: zero and the prior; droplets with seven steps or one voltage add nothing."""
    rng = np.random.default_rng(5)
    useless = [
        record(rng, 5e-7, 5, plan=Plan(pattern=(1,))).steps(),
        record(rng, 5e-7, 5).steps().select(np.arange(600) < 7),
    ]
    for droplets in ([], useless):
        speed, std = air_current(droplets, CONDITIONS, prior_std=5e-6)
        assert speed == pytest.approx(0.0, abs=1e-10)
        assert std == pytest.approx(5e-6, rel=1e-3)


@pytest.mark.parametrize("prior", [0.0, -1e-6, np.nan])
def test_prior_must_be_positive(prior):
    """A prior without width is refused."""
    with pytest.raises(PhysicsError):
        air_current([], CONDITIONS, prior_std=prior)


def test_a_cauchy_prior_gives_way_where_a_normal_one_holds():
    """Thirty droplets in air of 6 um/s: a Cauchy prior of 0.3 um/s scale lets them say so; none is the prior."""
    droplets = crowd(np.random.default_rng(6), 30, air_speed=6e-6)
    speed, std = air_current(droplets, CONDITIONS, prior_std=3e-7, tails="cauchy")
    assert speed == pytest.approx(6e-6, abs=3.5 * std)
    assert std < 1e-6
    held, held_std = air_current(droplets, CONDITIONS, prior_std=3e-7)
    assert held + 5 * held_std < 6e-6
    # tan(0.6827 pi / 2) scales hold 68 % of a Cauchy density
    nothing = air_current([], CONDITIONS, prior_std=1e-6, tails="cauchy")
    assert nothing == (0.0, pytest.approx(1.837e-6, rel=1e-3))


def test_a_fit_serves_as_well_as_its_steps():
    """Fits that are there already need not be made again."""
    droplets = crowd(np.random.default_rng(7), 5)
    fits = [free_fit(steps) for steps in droplets]
    assert air_current(fits, CONDITIONS, prior_std=3e-6) == air_current(droplets, CONDITIONS, prior_std=3e-6)
