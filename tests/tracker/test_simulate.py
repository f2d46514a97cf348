"""Simulated motion and pictures against closed forms."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pytest
from scipy.integrate import quad

from physics.droplet import ELEMENTARY_CHARGE, diffusion, droplet_mobility, fall_speed
from tracker.errors import UsageError
from tracker.simulate import Scene, read_assignments, scene_from_mapping, scene_text
from tracker.simulate.motion import (
    Course,
    draw_drops,
    frame_starts,
    move,
    scene_conditions,
    voltage_course,
)
from tracker.simulate.picture import draw_looks, pictures
from tracker.simulate.scene import read_scene


def moved(scene, seed=1):
    """Droplets and motion of a scene."""
    rng = np.random.default_rng(seed)
    drops = draw_drops(scene, rng)
    return drops, move(scene, drops, frame_starts(scene, rng, tick=0.0), rng)


def test_increments_have_the_covariance_of_blurred_brownian_motion():
    """Variance and neighbour covariance of exposure-averaged increments are 2 D dt - 2 D tau/3 and D tau/3.

    Source: A. J. Berglund, Phys. Rev. E 82 (2010), 011917, with R = 1/6 * tau/dt for a full shutter of length tau.
    """
    scene = Scene(droplets=400, radii=(0.5e-6,) * 400, seconds=20, voltages=(0.0,), exposure=0.8)
    _, motion = moved(scene)
    steps = np.diff(motion.x_px, axis=0) * scene.metres_per_pixel
    d = float(diffusion(0.5e-6, scene_conditions(scene)))
    dt, tau, count = scene.interval, scene.exposure_time, steps.size
    variance, neighbour = np.mean(steps**2), np.mean(steps[1:] * steps[:-1])
    # Variance of a mean of squares of correlated normals: (2/N)(c0^2 + 2 c1^2); five standard errors.
    c0, c1 = 2 * d * dt - 2 * d * tau / 3, d * tau / 3
    error = 5 * np.sqrt(2 / count * (c0**2 + 2 * c1**2))
    assert variance == pytest.approx(c0, abs=error)
    assert neighbour == pytest.approx(c1, abs=error)
    # Increments two apart share no Brownian motion.
    assert np.mean(steps[2:] * steps[:-2]) == pytest.approx(0, abs=error)


@pytest.mark.parametrize("number", [-3, 0, 4])
def test_mean_speed_is_fall_speed_and_drive(number):
    """In each plateau the droplets move at fall speed plus B q V / d, downward for a positive droplet."""
    scene = Scene(droplets=300, radii=(0.6e-6,) * 300, charge_numbers=(number,) * 300, seconds=8.0, first=3.0,
                  plateau=3.0, voltages=(0.0, 260.0), read_noise=0.0)  # fmt: skip
    _, motion = moved(scene)
    conditions = scene_conditions(scene)
    fall, mobility = float(fall_speed(0.6e-6, conditions)), float(droplet_mobility(0.6e-6, conditions))
    d = float(diffusion(0.6e-6, conditions))
    for first, last, volts in ((0, 74, 0.0), (75, 149, 260.0)):
        way = (motion.y_px[last] - motion.y_px[first]) * scene.metres_per_pixel
        time = motion.starts[last] - motion.starts[first]
        speed = fall + mobility * number * ELEMENTARY_CHARGE * volts / scene.plate_gap
        # Five standard errors of the mean of 300 diffusing droplets.
        assert way.mean() / time == pytest.approx(speed, abs=5 * np.sqrt(2 * d / time / 300))


def test_voltage_inside_an_exposure_counts_with_its_share():
    """A jump inside the exposure moves the mean place by the exact double integral of the voltage."""
    volts = voltage_course(((0.0, 0.0), (0.013, 250.0), (0.5, -100.0)), ramp=0.004, droop=0.02)
    starts = np.array([0.0, 0.01, 0.49, 0.7])
    exact = [
        quad(lambda t: float(volts.at(t)[0]), s, s + 0.02, points=[0.013, 0.017, 0.5, 0.504])[0]
        for s in starts
    ]
    # quad's own tolerance.
    np.testing.assert_allclose(volts.exposed(starts, 0.02) * 0.02, exact, rtol=1e-7, atol=1e-9)
    twice = [
        quad(lambda t: float(volts.at(t)[1]), 0, s, points=[0.013, 0.017, 0.5, 0.504])[0] for s in starts
    ]
    np.testing.assert_allclose(volts.at(starts)[2], twice, rtol=1e-7, atol=1e-9)


def test_course_of_straight_lines_and_jumps():
    """Value and integrals of a small course are those worked out by hand."""
    course = Course(np.array([0.0, 1.0, 1.0, 3.0]), np.array([0.0, 2.0, 5.0, 5.0]))
    value, once, twice = course.at(np.array([0.5, 1.0, 2.0, 4.0]))
    np.testing.assert_allclose(value, [1, 5, 5, 5])
    np.testing.assert_allclose(once, [0.25, 1, 6, 16])
    np.testing.assert_allclose(twice, [1 / 24, 1 / 3, 1 / 3 + 3.5, 1 / 3 + 3 + 22.5])


def test_charge_step_changes_the_speed_at_its_time():
    """A droplet that loses its charge in the middle of a constant field goes on at fall speed."""
    scene = Scene(droplets=200, radii=(0.7e-6,) * 200, charge_numbers=(-1,) * 200, charge_steps=200, seconds=12.0,
                  schedule=((0.0, 300.0),))  # fmt: skip
    drops, motion = moved(scene)
    gaining = drops.step == 1  # from -1 to 0
    assert 60 < gaining.sum() < 140
    late = motion.starts > 9.0
    assert np.all(motion.number[late][:, gaining] == 0)
    first, last = np.flatnonzero(late)[[0, -1]]
    time = motion.starts[last] - motion.starts[first]
    speed = (motion.y_px[last] - motion.y_px[first])[gaining].mean() * scene.metres_per_pixel / time
    conditions = scene_conditions(scene)
    error = 5 * np.sqrt(2 * float(diffusion(0.7e-6, conditions)) / time / gaining.sum())
    assert speed == pytest.approx(float(fall_speed(0.7e-6, conditions)), abs=error)


def test_turned_camera_sees_gravity_at_its_angle():
    """Gravity at +30 degrees moves droplets down and to the right in the picture."""
    scene = Scene(droplets=200, down_deg=30.0, voltages=(0.0,), radii=(1.5e-6,) * 200, seconds=10)
    _, motion = moved(scene)
    way = np.array([(motion.x_px[-1] - motion.x_px[0]).mean(), (motion.y_px[-1] - motion.y_px[0]).mean()])
    # 10 s of fall are 830 px; the mean of 200 droplets diffuses by 0.3 px.
    assert np.degrees(np.arctan2(way[0], way[1])) == pytest.approx(30.0, abs=0.1)


def test_air_current_carries_all_droplets_alike():
    """A current that rises evenly from 0 to u carries every droplet by u t / 2."""
    scene = Scene(
        droplets=300, voltages=(0.0,), seconds=10.0, air_current=((0.0, 0.0, 0.0), (10.0, 3e-5, 0.0))
    )
    _, motion = moved(scene)
    way = (motion.x_px[-1] - motion.x_px[0]).mean() * scene.metres_per_pixel
    end = motion.starts[-1] + scene.exposure_time / 2
    begin = scene.exposure_time / 2
    # Five standard errors of diffusion, D < 30 um^2/s.
    assert way == pytest.approx(3e-5 * (end**2 - begin**2) / 20, abs=5 * np.sqrt(2 * 3e-11 * 10 / 300))


def test_every_droplet_is_in_the_picture_at_some_moment():
    """No droplet of a scene stays out of sight for the whole recording."""
    scene = Scene(droplets=60, seconds=20)
    _, motion = moved(scene)
    inside = (np.abs(motion.x_px - 255.5) < 256) & (np.abs(motion.y_px - 191.5) < 192)
    assert np.all(inside.any(axis=0))


def test_returning_droplets_stay_near():
    """Droplets that come in again are never further than 48 px above or below the picture at a frame."""
    scene = Scene(droplets=40, seconds=60, returning=True, radius=(1e-6, 1.5e-6))
    _, motion = moved(scene)
    # One more frame's way, below 40 px here, may be gone before the return.
    assert motion.y_px.min() > -48 - 40
    assert motion.y_px.max() < scene.height + 48 + 40
    assert motion.returned.sum() > 40


def still_scene(**changes):
    """A scene whose droplets hardly move within an exposure, without spread in brightness."""
    plain = {"droplets": 1, "voltages": (0.0,), "seconds": 0.4, "peak_spread": 0.0, "gradient": 0.0, "width": 64,
             "height": 48, "exposure": 0.01}  # fmt: skip
    return Scene(**(plain | changes))


def test_spot_has_the_light_and_place_of_its_droplet():
    """A noiseless 16-bit spot holds 2 pi sigma^2 peak of light, centred on the true place."""
    scene = still_scene(bits=16, gain=0.0, read_noise=0.0, background=0.0, gravity=1e-9, charge_numbers=(0,),
                        spot=1.5)  # fmt: skip
    rng = np.random.default_rng(4)
    drops = draw_drops(scene, rng)
    motion = move(scene, drops, frame_starts(scene, rng, tick=0.0), rng)
    looks = draw_looks(scene, rng)
    for k, picture in enumerate(pictures(scene, looks, motion, rng)):
        x, y = motion.x_px[k, 0], motion.y_px[k, 0]
        if not (8 < x < 55 and 8 < y < 39):
            continue
        light = picture.astype(float)
        rows, columns = np.indices(light.shape)
        # Rounding to whole grey values, 28 280 at the peak, over about 200 pixels.
        assert light.sum() == pytest.approx(2 * np.pi * 1.5**2 * 110 * 256, rel=1e-3)
        assert (columns * light).sum() / light.sum() == pytest.approx(x, abs=2e-3)
        assert (rows * light).sum() / light.sum() == pytest.approx(y, abs=2e-3)


def test_streak_keeps_the_mean_place():
    """A droplet that moves 12 px within an exposure is drawn out, with its light centred on the mean place."""
    scene = still_scene(bits=16, gain=0.0, read_noise=0.0, background=0.0, exposure=0.9, frame_rate=5, seconds=1,
                        radii=(1.2e-6,), height=200, spot=1.2)  # fmt: skip
    rng = np.random.default_rng(9)
    drops = draw_drops(scene, rng)
    motion = move(scene, drops, frame_starts(scene, rng, tick=0.0), rng)
    picture = list(pictures(scene, draw_looks(scene, rng), motion, rng))
    k = int(np.argmin(np.abs(motion.y_px[:, 0] - 100)))
    light = picture[k].astype(float)
    rows = np.arange(scene.height)
    mean = (rows * light.sum(axis=1)).sum() / light.sum()
    spread = np.sqrt((rows**2 * light.sum(axis=1)).sum() / light.sum() - mean**2)
    assert mean == pytest.approx(motion.y_px[k, 0], abs=0.02)
    # A uniform streak of length L adds L^2/12; the drawing in steps of half a spot is that less 1/n^2.
    assert spread == pytest.approx(np.hypot(1.2, motion.smear_y_px[k, 0] / np.sqrt(12)), rel=0.02)


def test_noise_has_the_stated_variance():
    """The variance of a grey value is gain x mean + read noise^2, and 1/12 for the rounding."""
    scene = Scene(
        droplets=0, width=256, height=256, background=80, gradient=0, gain=0.3, read_noise=2.0, seconds=0.4
    )
    rng = np.random.default_rng(2)
    motion = move(scene, draw_drops(scene, rng), frame_starts(scene, rng, tick=0.0), rng)
    grey = np.array(list(pictures(scene, draw_looks(scene, rng), motion, rng)), float)
    expected = 0.3 * 80 + 4 + 1 / 12
    # Five standard errors of a variance: sqrt(2/N).
    assert grey.var() == pytest.approx(expected, rel=5 * np.sqrt(2 / grey.size))
    assert grey.mean() == pytest.approx(80, abs=5 * np.sqrt(expected / grey.size))


def test_lamp_is_half_lit_when_the_field_comes_on_in_mid_exposure():
    """The lamp's light is the share of the exposure during which the voltage was not 0."""
    scene = still_scene(
        droplets=0, schedule=((0.0, 0.0), (0.09, 260.0), (0.2, 0.0)), exposure=0.5, frame_rate=25
    )
    _, motion = moved(scene)
    # Exposures of 20 ms start at 0, 40, 80, ... ms; the third is lit for its second half.
    np.testing.assert_allclose(motion.lit[:6], [0, 0, 0.5, 1, 1, 0], atol=1e-9)


def test_evaporation_shrinks_the_radius():
    """The radius falls as exp(-rate t)."""
    scene = Scene(droplets=3, evaporation=1e-3, seconds=20)
    drops, motion = moved(scene)
    np.testing.assert_allclose(
        motion.radius[-1], drops.radius * np.exp(-1e-3 * motion.starts[-1]), rtol=1e-12
    )


def test_schedule_follows_from_plateaus():
    """Voltages come in turn, the first plateau with its own length."""
    scene = Scene(seconds=8.0, first=2.0, plateau=2.5, voltages=(0.0, 260.0, -260.0))
    assert scene.plan == ((0.0, 0.0), (2.0, 260.0), (4.5, -260.0), (7.0, 0.0))


def test_scene_survives_its_own_text(tmp_path):
    """A scene written as TOML and read back is the same scene."""
    scene = Scene(lamp=(1, 2, 3, 4), schedule=((0.0, 1.0), (2.5, -260.0)), codec="h264", returning=True)
    (tmp_path / "scene.toml").write_text(scene_text(scene), encoding="utf-8")
    assert scene_from_mapping(read_scene(tmp_path / "scene.toml")) == scene


def test_text_of_a_scene_tells_every_field(tmp_path):
    """Each field has one line with its meaning, a lamp that is not there, too; it is read as the scene."""
    text = scene_text(Scene())
    names = [line.removeprefix("# ").split(" = ")[0] for line in text.splitlines()]
    assert names == [field.name for field in fields(Scene)]
    assert all(len(line.split("  # ")[1]) > 0 for line in text.splitlines())
    (tmp_path / "scene.toml").write_text(text, encoding="utf-8")
    assert scene_from_mapping(read_scene(tmp_path / "scene.toml")) == Scene()


@pytest.mark.parametrize(
    "line",
    ["droplets=-1", "exposure=0.9\nuneven=0.2", "radii=[1e-6]", "nonsense=1", "bits=7", "voltages=[]", "ramp=3.0",
     "schedule=[[0, 1], [0, 2]]", "radius=[1e-6, 5e-7]", 'width="wide"', "charge_steps=99", "radius=[5.0, 6.0]",
     'schedule=[["0 s", "260 V"]]', "lamp=[1, 2, 3]", "air_current=[[0, 1]]", "radius=[1e-6]", "seconds=nan"],
)  # fmt: skip
def test_impossible_scene_is_refused_in_one_line(line):
    """A wrong field raises with its name, and the line is one."""
    with pytest.raises(UsageError) as caught:
        scene_from_mapping(read_assignments([line]))
    assert "\n" not in str(caught.value)
    assert line.split("=")[0] in str(caught.value) or line.split("\n")[-1].split("=")[0] in str(caught.value)
