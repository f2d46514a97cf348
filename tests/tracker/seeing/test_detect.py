"""Detection holds its false-alarm rate and finds what stands out."""

from __future__ import annotations

import numpy as np
import pytest

from tracker.seeing.background import find_background, ranks_in_time
from tracker.seeing.detect import build_detector, false_alarm_rate, threshold_for


def noise(n: int, *, size: int = 160, seed: int = 1) -> np.ndarray:
    """Pictures of rounded white noise about 40 grey."""
    return np.rint(np.random.default_rng(seed).normal(40, 3, (n, size, size))).astype(np.uint8)


def spots(pictures: np.ndarray, *, peak: float, width: float, seed: int = 2) -> tuple[np.ndarray, np.ndarray]:
    """Add nine spots to each picture, well apart; give the pictures and the places."""
    rng = np.random.default_rng(seed)
    n, size, _ = pictures.shape
    grid = (np.arange(3) + 0.5) * size / 3
    place = np.stack(np.meshgrid(grid, grid), -1).reshape(-1, 2) + rng.uniform(-8, 8, (n, 9, 2))
    at = np.arange(size)
    gx = np.exp(-0.5 * ((at - place[..., 0, None]) / width) ** 2)
    gy = np.exp(-0.5 * ((at - place[..., 1, None]) / width) ** 2)
    light = peak * np.einsum("nij,nik->njk", gy, gx)
    return np.rint(pictures + light).astype(np.uint8), place


@pytest.mark.parametrize("width", [1.2, 1.7])
def test_asked_false_alarm_rate_holds_in_white_noise(width):
    """Empty pictures give at most the asked rate of candidates, and not far fewer; on binned pictures too."""
    samples = noise(40)
    level = find_background(samples, black=0.0).level
    asked = 0.5
    detector, _ = build_detector(samples, level, width=width, false_alarms=asked)
    fresh = noise(200, seed=9)
    frame, *_ = detector.candidates(list(fresh))
    # 100 expected: 4 standard deviations are 40; the formula is an upper limit that real maxima stay some way below
    assert 0.3 * asked < len(frame) / 200 < asked * (1 + 4 / np.sqrt(100))


def test_threshold_undoes_the_rate():
    """The rate at the threshold found for it is the rate asked for."""
    for rate in (1.0, 0.05, 0.01):
        assert false_alarm_rate(threshold_for(rate, 640 * 480, 1.7), 640 * 480, 1.7) == pytest.approx(
            rate, rel=2e-3
        )
    # published form, evaluated independently: 640 x 480, sigma 1.7, one maximum a frame
    assert threshold_for(1.0, 640 * 480, 1.7) == pytest.approx(4.38, abs=0.01)


@pytest.mark.parametrize("width", [1.2, 1.7, 2.6])
def test_spots_of_three_times_the_noise_are_found(width):
    """Where the matched filter has a signal to noise of nine, the recall is 0.995 at 0.05 false alarms a frame.

    Nine is a peak of three pixel noises at a width of 1.7 px: signal to noise = peak / noise * sqrt(pi) * width.
    """
    samples = noise(40)
    level = find_background(samples, black=0.0).level
    detector, _ = build_detector(samples, level, width=width, false_alarms=0.05)
    pictures, place = spots(noise(80, seed=5), peak=9 * 3 / (np.sqrt(np.pi) * width), width=width)
    frame, x, y, _ = detector.candidates(list(pictures))
    near = np.hypot(x[:, None] - place[frame, :, 0], y[:, None] - place[frame, :, 1]) < 2 * width
    hit = np.zeros((80, 9), np.bool_)
    hit[frame[near.any(1)], near.argmax(1)[near.any(1)]] = True
    assert hit.mean() >= 0.995
    # 4 expected in 80 frames: 4 + 4 standard deviations
    assert np.count_nonzero(~near.any(1)) <= 12


def test_a_darker_picture_is_no_noisier_one():
    """Spots of one picture that is darker by less than its noise are found as those of the others.

    0.8 grey are 1.9 standard deviations of what a filter of 2 px leaves of 3 grey, so that spots of 12 stand out
    by 10: five standard deviations above the threshold.
    """
    width, darker = 2.0, 0.8
    rng = np.random.default_rng(4)
    dark = np.zeros((12, 1, 1))
    dark[3] = darker
    samples = np.rint(rng.normal(40 - dark, 3, (12, 160, 160))).astype(np.uint8)
    level = np.full((160, 160), 40, np.float32)
    pictures, _ = spots(samples, peak=12 * 3 / (np.sqrt(np.pi) * width), width=width)
    detector, _ = build_detector(pictures, level, width=width, false_alarms=0.05)
    assert detector.usual_spread == 0
    frame, *_ = detector.candidates(list(pictures))
    assert np.bincount(frame, minlength=12)[3] == 9


def test_minima_network_sorts():
    """The network of minima and maxima gives the ranks that a plain sort gives, for awkward numbers of pictures."""
    rng = np.random.default_rng(3)
    for n in (1, 2, 3, 7, 13, 32, 56):
        stack = rng.integers(0, 256, (n, 5, 4), dtype=np.uint8)
        kept = stack.copy()
        for ranks in (tuple(range(n)), (n // 3,), (0, n // 2)):
            np.testing.assert_array_equal(ranks_in_time(stack, ranks), np.sort(stack, axis=0)[list(ranks)])
        np.testing.assert_array_equal(stack, kept)


def test_background_ignores_a_droplet_that_rests_for_half_the_samples():
    """A spot at one place in half of the samples changes the background by less than the noise of a pixel."""
    rng = np.random.default_rng(4)
    samples = np.rint(rng.normal(30, 2, (56, 64, 64)))
    y, x = np.mgrid[:64, :64]
    samples[:28] += 80 * np.exp(-((x - 30) ** 2 + (y - 30) ** 2) / (2 * 1.7**2))
    level = find_background(samples.astype(np.uint8), black=0.0).level
    assert abs(level[30, 30] - 30) < 2.0
    assert abs(level[:, 45:].mean() - 30) < 0.1  # truncation of uint8 costs nothing: values were rounded


def test_dark_line_becomes_shade_and_bright_line_does_not():
    """A line that takes 60 % of the light has shade 0.4 there; a bright line leaves the shade at 1."""
    rng = np.random.default_rng(4)
    ground = np.full((160, 160), 40.0)
    ground[60:63] *= 0.4
    ground[110:113] += 25
    samples = np.rint(rng.normal(ground, 1.5, (56, 160, 160))).astype(np.uint8)
    shade = find_background(samples, black=0.0).shade
    assert shade[61, 10:150].mean() == pytest.approx(0.4, abs=0.03)  # 0.2 grey of 40, and the smooth part's
    assert shade[111].min() == 1
    assert shade[20:50].min() == 1
