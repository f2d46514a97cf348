"""Doubt about places in pictures that a codec predicts: shares of copies, rounding, pulls on compressed recordings."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tracker.records import Settings, Sightings
from tracker.seeing.copies import mend_deviations, share_of_copies
from tracker.seeing.frames import open_recording
from tracker.seeing.see import see
from tracker.simulate import Scene, simulate

SCENE = Scene(droplets=8, seconds=9, width=320, height=240, first=1.5, plateau=1.5)


@pytest.mark.parametrize("share", [0.2, 0.6, 1.0])
@pytest.mark.parametrize("blur", [0.0, 0.02])
def test_share_is_the_mean_cosine_of_blurred_multiples(share, blur):
    """Multiples of a step, blurred by noise s, have the mean cosine exp(-2 pi^2 s^2 / q^2); free steps add none.

    Source: characteristic function of the normal distribution, Fisher, Statistical Analysis of Circular Data (1993),
    3.3.4. The free steps' own, exp(-2 pi^2 0.4^2 / 0.25^2), is 1e-22.
    """
    rng = np.random.default_rng(1)
    n, q = 20_000, 0.25
    steps = np.where(rng.random(n) < share, q * rng.integers(-5, 6, n), rng.normal(0, 0.4, n))
    expected = share * np.exp(-2 * np.pi**2 * blur**2 / q**2)
    # a cosine's variance is at most 1; the free steps and the blur make it
    assert share_of_copies(steps + rng.normal(0, blur, n), q) == pytest.approx(
        expected, abs=4 / np.sqrt(n) + 1e-12
    )


def test_free_steps_show_no_copies():
    """Steps of free diffusion are called copies by less than one in ten thousand recordings."""
    rng = np.random.default_rng(2)
    found = [share_of_copies(rng.normal(0.3, 0.4, 500), 0.25) > 0 for _ in range(2000)]
    # a mean cosine beyond four standard deviations has the probability 3e-5: 0.06 of 2000
    assert sum(found) <= 1


def follow(
    rng: np.random.Generator, kinds: np.ndarray, *, droplets: int = 12
) -> tuple[Sightings, np.ndarray, np.ndarray]:
    """Droplets that diffuse, seen where a quarter pixel's motion vectors put copies of them; and their true x."""
    frames = len(kinds)
    true = 100 + np.cumsum(rng.normal(0, 0.35, (2, droplets, frames)), axis=2)
    seen = true.copy()
    for i in np.flatnonzero(kinds == "P"):
        way = true[:, :, i] - seen[:, :, i - 1]
        seen[:, :, i] = seen[:, :, i - 1] + np.rint(4 * way) / 4
    number, frame = (a.ravel() for a in np.indices((droplets, frames)))
    one = np.ones(droplets * frames)
    sightings = Sightings(frame, *seen.reshape(2, -1), 0.1 * one, 0.1 * one, 500 * one, 1.7 * one, 0 * frame)
    return sightings, number, true.reshape(2, -1)


def test_copies_add_the_variance_of_rounding():
    """Places put to a quarter pixel are off by the variance q^2 / 12, and so much is added to the stated one.

    Source: W. R. Bennett, Bell Syst. Tech. J. 27 (1948), 446.
    """
    rng = np.random.default_rng(3)
    kinds = np.array(["I"] + ["P"] * 399)
    sightings, piece, true = follow(rng, kinds)
    strain = rng.normal(0, 1, (len(sightings), 3))
    held, report = mend_deviations(sightings, strain=strain, piece=piece, kinds=kinds)
    predicted = sightings.frame > 0
    added = held.x_std[predicted] ** 2 - report["P"]["shape_variance"] * sightings.x_std[predicted] ** 2
    assert added == pytest.approx(0.25**2 / 12, rel=1e-3)  # every one is a copy: no chance in the share
    rounding = np.var((np.stack([sightings.x, sightings.y]) - true)[:, predicted])
    # the variance of n uniform numbers has the relative spread sqrt(0.8 / n)
    assert rounding == pytest.approx(0.25**2 / 12, rel=4 * np.sqrt(0.8 / (2 * predicted.sum())))


def test_shape_of_spots_scales_the_deviation():
    """Spots out of shape by three times the stated noise have places three times as doubtful, and no copies."""
    rng = np.random.default_rng(4)
    kinds = np.array(["I", "P"] * 200)
    n = 12 * len(kinds)
    number, frame = (a.ravel() for a in np.indices((12, len(kinds))))
    x, y = 100 + np.cumsum(rng.normal(0, 0.35, (2, 12, len(kinds))), axis=2).reshape(2, -1)
    one = np.ones(n)
    sightings = Sightings(frame, x, y, 0.05 * one, 0.06 * one, one, 1.7 * one, 0 * frame)
    strain = rng.normal(0, 1, (n, 3)) * np.where(frame % 2, 3, 1)[:, None]
    held, report = mend_deviations(sightings, strain=strain, piece=number, kinds=kinds)
    # standard deviation of a median absolute deviation: 1.17 / sqrt(n); the smaller of two is taken
    tolerance = 5 * 1.17 / np.sqrt(n / 2)
    for odd, factor in ((0, 1), (1, 3)):
        at = frame % 2 == odd
        assert held.x_std[at] / 0.05 == pytest.approx(factor, rel=tolerance)
        assert held.y_std[at] / 0.06 == pytest.approx(factor, rel=tolerance)
    assert report["P"]["copies_std_px"] == 0


def test_pictures_without_loss_are_scaled_alone():
    """Without loss the shape of the spots scales the deviation, and steps of a quarter pixel mean nothing."""
    rng = np.random.default_rng(5)
    kinds = np.array(["P"] * 200)
    sightings, piece, _ = follow(rng, kinds)
    strain = 2 * rng.normal(0, 1, (len(sightings), 3))
    held, report = mend_deviations(sightings, strain=strain, piece=piece, kinds=np.array([""] * 200))
    # standard deviation of a median absolute deviation: 1.17 / sqrt(n)
    assert held.x_std / 0.1 == pytest.approx(2, rel=5 * 1.17 / np.sqrt(len(sightings)))
    assert report["lossless"]["copies_std_px"] == 0


def test_few_sightings_keep_their_deviations():
    """Fifty sightings are too few to scale anything by; none at all give an empty record."""
    rng = np.random.default_rng(6)
    kinds = np.array(["P"] * 25)
    sightings, piece, _ = follow(rng, kinds, droplets=2)
    held, report = mend_deviations(sightings, strain=np.ones((50, 3)), piece=piece, kinds=kinds)
    assert held.x_std == pytest.approx(sightings.x_std, rel=1e-12)
    assert report == {}
    none = sightings.take(np.zeros(50, np.bool_))
    assert mend_deviations(none, strain=np.ones((0, 3)), piece=piece[:0], kinds=kinds) == (none, {})


@pytest.mark.parametrize(
    ("codec", "ending", "expected"),
    [("h264", "mp4", {"I", "P", "B"}), ("mjpeg", "avi", {"I"}), ("ffv1", "mkv", {""})],
)
def test_kinds_of_pictures_are_read(tmp_path, codec, ending, expected):
    """H.264 predicts most pictures from the first, Motion-JPEG none; without loss there are no kinds."""
    path = tmp_path / f"clip.{ending}"
    simulate(Scene(droplets=2, seconds=1, width=160, height=120, codec=codec), path, seed=1)
    with open_recording(path) as reader:
        for _ in reader:
            pass
        kinds = reader.kinds
    assert len(kinds) == 25
    assert kinds[0] == ("I" if "I" in expected else "")
    assert set(kinds) <= expected
    assert ("P" in kinds) == (codec == "h264")


@pytest.mark.parametrize(
    ("codec", "quality", "ending"),
    [("h264", 18, "mp4"), ("h264", 22, "mp4"), ("mjpeg", 8, "avi"), ("ffv1", 0, "mkv")],
)
def test_stated_deviations_are_true_after_compression(tmp_path, codec, quality, ending):
    """Errors of places against the truth have the stated standard deviation, compressed or not."""
    path = tmp_path / f"clip.{ending}"
    files = simulate(replace(SCENE, codec=codec, quality=quality), path, seed=8)
    truth = dict(np.load(files.truth_npz))
    seen = see(path, settings=Settings())
    s = seen.sightings
    x, y = (truth[c][truth["written"]][s.frame] for c in ("x_px", "y_px"))
    distance = np.hypot(x - s.x[:, None], y - s.y[:, None])
    own = distance.argmin(1)
    fine = (distance.min(1) < 1) & (np.sort(distance, axis=1)[:, 1] > 15) & (s.flags == 0)
    rows = np.flatnonzero(fine)
    pulls = np.concatenate(
        [
            (s.x[rows] - x[rows, own[rows]]) / s.x_std[rows],
            (s.y[rows] - y[rows, own[rows]]) / s.y_std[rows],
        ]
    )
    # 4 / sqrt(2 n) by chance, and a tenth for what is known of the noise of camera and codec
    assert pulls.std() == pytest.approx(1, abs=0.1 + 4 / np.sqrt(2 * len(pulls)))
    assert ("lossless" in seen.report["picture_kinds"]) == (codec == "ffv1")
