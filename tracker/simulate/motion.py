"""Droplets drawn and moved: exact exposure means of drift, field and Brownian motion."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike

from physics.air import Air, moist_air
from physics.droplet import ELEMENTARY_CHARGE, Conditions, diffusion, droplet_mobility, fall_speed
from tracker.records import FloatArray, IntArray, readonly
from tracker.simulate.scene import Knots, Scene

_OUTSIDE_PX = 24  # a returning droplet turns up this far outside, and is taken out twice as far outside


@dataclass(frozen=True, slots=True)
class Course:
    """A quantity over time, straight between knots, two knots at one time for a jump; exact integrals."""

    times: FloatArray  # (K,) s, never decreasing, the first at or before 0
    values: FloatArray  # (K,)
    slopes: FloatArray = field(init=False)
    once: FloatArray = field(init=False)  # integral from the first knot
    twice: FloatArray = field(init=False)  # integral of the integral

    def __post_init__(self) -> None:
        t, v = np.asarray(self.times, float), np.asarray(self.values, float)
        h = np.diff(t)
        slopes = np.divide(np.diff(v), h, out=np.zeros_like(h), where=h > 0)
        once = np.concatenate([[0.0], np.cumsum(h * (v[:-1] + v[1:]) / 2 * (h > 0))])
        twice = np.concatenate([[0.0], np.cumsum(once[:-1] * h + v[:-1] * h**2 / 2 + slopes * h**3 / 6)])
        for name, column in (
            ("times", t),
            ("values", v),
            ("slopes", np.append(slopes, 0.0)),
            ("once", once),
            ("twice", twice),
        ):
            object.__setattr__(self, name, readonly(column))

    def at(self, time: ArrayLike) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Value, integral and integral of the integral at each time (s, not before the first knot)."""
        i = np.maximum(np.searchsorted(self.times, time, side="right") - 1, 0)
        u = np.asarray(time) - self.times[i]
        v, s, once = self.values[i], self.slopes[i], self.once[i]
        return v + s * u, once + v * u + s * u**2 / 2, self.twice[i] + once * u + v * u**2 / 2 + s * u**3 / 6

    def exposed(self, start: FloatArray, length: float) -> FloatArray:
        """Mean over each exposure of the quantity itself."""
        return np.asarray((self.at(start + length)[1] - self.at(start)[1]) / length)


def voltage_course(plan: Knots, *, ramp: float, droop: float) -> Course:
    """Voltage over time of a plan of plateaus.

    Parameters
    ----------
    plan : tuple of (float, float)
        Times in s, increasing, the first at 0, and voltages in V in force from then on.
    ramp : float
        Duration of a change of voltage in s, shorter than each plateau; it begins at the planned time.
    droop : float
        Relative loss of voltage in 1/s, from the end of the change on, straight.

    Returns
    -------
    course : Course
        In V.
    """
    times, volts = [plan[0][0]], [plan[0][1]]
    for (t, _), (after, new) in itertools.pairwise(plan):
        times += [after, after + ramp]
        volts += [volts[-1] * (1 - droop * (after - t)), new]
    times.append(times[-1] + 1e6)  # the last plateau droops on
    volts.append(volts[-1] * (1 - droop * 1e6))
    return Course(np.array(times), np.array(volts))


@dataclass(frozen=True, slots=True)
class Drops:
    """Droplets of a scene as drawn."""

    radius: FloatArray  # (J,) m at the start
    number: IntArray  # (J,) signed charge over e at the start
    step_time: FloatArray  # (J,) s; infinite for a droplet that keeps its charge
    step: IntArray  # (J,) change of the charge number at that time


@dataclass(frozen=True, slots=True)
class Motion:
    """True motion: one row a frame, lost ones included, one column a droplet."""

    starts: FloatArray  # (K,) s, start of exposure
    x_px: FloatArray  # (K, J) mean over the exposure
    y_px: FloatArray  # (K, J)
    smear_x_px: FloatArray  # (K, J) motion of the mean drift within the exposure
    smear_y_px: FloatArray  # (K, J)
    voltage: FloatArray  # (K,) V, mean over the exposure
    lit: FloatArray  # (K,) share of the exposure with the voltage not 0
    radius: FloatArray  # (K, J) m
    number: IntArray  # (K, J) charge number at the start of the exposure
    returned: FloatArray  # (K, J) 1 where a droplet came in anew


def scene_air(scene: Scene) -> Air:
    """Air of the scene."""
    return moist_air(scene.temperature, scene.pressure, relative_humidity=scene.relative_humidity)


def scene_conditions(scene: Scene) -> Conditions:
    """Conditions that the droplets of the scene feel."""
    air = scene_air(scene)
    return Conditions(
        temperature=scene.temperature, viscosity=air.viscosity, mean_free_path=air.mean_free_path,
        air_density=air.density, oil_density=scene.oil_density, gravity=scene.gravity,
        plate_gap=scene.plate_gap, slip=scene.slip,
    )  # fmt: skip


def draw_drops(scene: Scene, rng: np.random.Generator) -> Drops:
    """Draw radii, charges and charge steps.

    Parameters
    ----------
    scene : Scene
        Its ranges or given values.
    rng : numpy.random.Generator
        Source of chance.

    Returns
    -------
    drops : Drops
        One entry a droplet.
    """
    count = scene.droplets
    radius = rng.uniform(*scene.radius, count)
    sign = np.where(rng.random(count) < scene.positive, 1, -1)
    number = rng.integers(*scene.charge_number, size=count, endpoint=True) * sign
    radius = np.array(scene.radii) if scene.radii else radius
    number = np.array(scene.charge_numbers, dtype=np.int64) if scene.charge_numbers else number
    step_time, step = np.full(count, np.inf), np.zeros(count, dtype=np.int64)
    chosen = rng.permutation(count)[: scene.charge_steps]
    step_time[chosen] = rng.uniform(0.25, 0.75, len(chosen)) * scene.seconds
    step[chosen] = rng.choice([-1, 1], len(chosen))
    return Drops(readonly(radius), readonly(number, np.int64), readonly(step_time), readonly(step, np.int64))


def frame_starts(scene: Scene, rng: np.random.Generator, *, tick: float) -> FloatArray:
    """Give the starts of all exposures in s, lost frames included, on the clock of the file.

    Parameters
    ----------
    scene : Scene
        Frame rate, length and unevenness.
    rng : numpy.random.Generator
        Source of chance.
    tick : float
        Time step of the container in s, to which the times are rounded; 0 for none.

    Returns
    -------
    starts : ndarray of shape (K,)
        Increasing, the first at 0.
    """
    starts = np.arange(max(1, round(scene.seconds * scene.frame_rate))) * scene.interval
    if scene.uneven:
        starts = starts + rng.uniform(-scene.uneven, scene.uneven, len(starts)) * scene.interval
        starts -= starts[0]
    return readonly(np.round(starts / tick) * tick if tick else starts)


def move(scene: Scene, drops: Drops, starts: FloatArray, rng: np.random.Generator) -> Motion:
    """Move the droplets: terminal speed, field, air current and Brownian motion, averaged over each exposure.

    Parameters
    ----------
    scene : Scene
        The cell, the voltages, the camera.
    drops : Drops
        The droplets.
    starts : ndarray of shape (K,)
        Starts of the exposures in s.
    rng : numpy.random.Generator
        Source of chance.

    Returns
    -------
    motion : Motion
        Means over the exposures in px and the truth that belongs to them.

    Notes
    -----
    Droplets respond within microseconds, so speeds follow the voltage at once. With W the Brownian motion
    during an exposure of length tau, W(tau) and its mean over the exposure are jointly normal with variances
    2 D tau and 2 D tau / 3 and covariance D tau: drawn exactly, with no time step. Radius and mobility of an
    evaporating droplet are those at the start of the exposure until the next one.
    """
    tau, conditions = scene.exposure_time, scene_conditions(scene)
    radius = drops.radius * np.exp(-scene.evaporation * starts)[:, None]
    fall, mobility = fall_speed(radius, conditions), droplet_mobility(radius, conditions)
    spread = np.sqrt(2 * diffusion(radius, conditions))
    volts = voltage_course(scene.plan, ramp=scene.ramp, droop=scene.droop)
    current = np.array(scene.air_current)
    bounds = np.append(starts, starts[-1] + tau)
    # each is a triple: advance to the next start, mean over the exposure, advance to the exposure's end
    steady = (np.diff(bounds), np.full(len(starts), tau / 2), np.full(len(starts), tau))
    side = [a[:, None] for a in _travel(Course(current[:, 0], current[:, 1]), bounds, tau)]
    down = [
        fall * t[:, None] + mobility * ELEMENTARY_CHARGE * s / scene.plate_gap + a[:, None]
        for t, s, a in zip(
            steady,
            _impulse(volts, drops, bounds, tau),
            _travel(Course(current[:, 0], current[:, 2]), bounds, tau),
            strict=True,
        )
    ]
    ways = [_wander(drift, spread, bounds, tau, rng) for drift in (side, down)]
    number = drops.number + np.where(starts[:, None] >= drops.step_time, drops.step, 0)
    return _into_picture(scene, ways, volts, starts, (readonly(radius), readonly(number, np.int64)), rng)


def _travel(course: Course, bounds: FloatArray, tau: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Integral from each start: to the next bound, its mean over the exposure, to the exposure's end."""
    start = bounds[:-1]
    _, once, twice = course.at(bounds)
    _, end_once, end_twice = course.at(start + tau)
    return np.diff(once), (end_twice - twice[:-1]) / tau - once[:-1], end_once - once[:-1]


def _impulse(volts: Course, drops: Drops, bounds: FloatArray, tau: float) -> list[FloatArray]:
    """Integral of voltage times charge number, as `_travel`, one column a droplet."""
    columns = []
    for number, time, step in zip(drops.number, drops.step_time, drops.step, strict=True):
        total = [number * part for part in _travel(volts, bounds, tau)]
        if step:
            values = np.array([volts.at(time)[0]]).ravel()
            late = volts.times > time
            after = Course(
                np.concatenate([[volts.times[0], time, time], volts.times[late]]),
                np.concatenate([[0.0, 0.0], values, volts.values[late]]),
            )
            total = [a + step * b for a, b in zip(total, _travel(after, bounds, tau), strict=True)]
        columns.append(total)
    return [np.array([c[i] for c in columns]).reshape(len(columns), len(bounds) - 1).T for i in range(3)]


def _wander(
    drift: list[FloatArray], spread: FloatArray, bounds: FloatArray, tau: float, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Exposure means from the first start on, with Brownian motion, and the drift within each exposure."""
    end, mean, rest = rng.standard_normal((3, *spread.shape))
    end = spread * np.sqrt(tau) * end
    mean = end / 2 + spread * np.sqrt(tau / 12) * mean
    rest = spread * np.sqrt(np.maximum(np.diff(bounds) - tau, 0))[:, None] * rest
    at_start = np.cumsum(drift[0] + end + rest, axis=0) - (drift[0] + end + rest)
    return at_start + drift[1] + mean, drift[2]


def _into_picture(
    scene: Scene,
    ways: list[tuple[FloatArray, FloatArray]],
    volts: Course,
    starts: FloatArray,
    truth: tuple[FloatArray, IntArray],
    rng: np.random.Generator,
) -> Motion:
    """Turn side and down into pixels, and place every droplet so that the picture shows it at some moment."""
    (side, side_smear), (down, down_smear) = ways
    sin, cos = np.sin(np.radians(scene.down_deg)), np.cos(np.radians(scene.down_deg))
    scale = scene.metres_per_pixel
    x, y = (cos * side + sin * down) / scale, (cos * down - sin * side) / scale
    columns = np.arange(x.shape[1])
    moment = np.zeros(len(columns), int) if scene.returning else rng.integers(0, len(starts), len(columns))
    place = rng.uniform(-0.5, [scene.width - 0.5, scene.height - 0.5], (len(columns), 2))
    x, y = x - x[moment, columns] + place[:, 0], y - y[moment, columns] + place[:, 1]
    x, y, returned = _return(scene, x, y, rng) if scene.returning else (x, y, np.zeros_like(x))
    live = Course(*_live_knots(volts))
    return Motion(
        starts=starts, x_px=readonly(x), y_px=readonly(y),
        smear_x_px=readonly((cos * side_smear + sin * down_smear) / scale),
        smear_y_px=readonly((cos * down_smear - sin * side_smear) / scale),
        voltage=readonly(volts.exposed(starts, scene.exposure_time)),
        lit=readonly(live.exposed(starts, scene.exposure_time)),
        radius=truth[0], number=truth[1], returned=readonly(returned),
    )  # fmt: skip


def _live_knots(volts: Course) -> tuple[FloatArray, FloatArray]:
    """Knots of a course that is 1 where the voltage is not 0 (through ramps, too) and 0 elsewhere."""
    lit = ((volts.values[:-1] != 0) | (volts.values[1:] != 0)).astype(float)
    lit = np.append(lit, lit[-1])
    return np.repeat(volts.times, 2)[1:], np.repeat(lit, 2)[:-1]


def _return(
    scene: Scene, x: FloatArray, y: FloatArray, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Let droplets that left above or below come in at the other edge, and mark where."""
    x, y, returned = x.copy(), y.copy(), np.zeros_like(x)
    far, jump = 2 * _OUTSIDE_PX, scene.height + 3 * _OUTSIDE_PX
    for j in range(x.shape[1]):
        frame = 0
        while len(out := np.flatnonzero((y[frame:, j] < -far) | (y[frame:, j] > scene.height + far))):
            frame += int(out[0])
            y[frame:, j] += jump if y[frame, j] < 0 else -jump
            x[frame:, j] += rng.uniform(0, scene.width) - x[frame, j]
            returned[frame, j] = 1
    return x, y, returned
