"""The clock of a voltage log against the recording's, found from all droplets together."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from physics.motion import MIN_INCREMENTS, Increments, field_impulse, free_fit, whitened
from tracker.bench import Bench
from tracker.errors import FieldError
from tracker.motion.field import field_of_steps, recording_span
from tracker.motion.fieldgain import drive_gains
from tracker.motion.fieldlog import Log, field_from_log, on_recording_clock
from tracker.motion.velocity import Orientation, Path, View, fit_orientation, paths
from tracker.records import Field, FloatArray, IntArray, Recording, Tracks

COARSE = 0.1  # s, step of the first search
FINE = 0.01  # s, step of the second
RATE_STD = 3e-4  # relative: what clocks of loggers and cameras differ by; prior of the rate
RATE_GAIN = 10.83  # chi-square by which a rate must improve the fit, 1 in 1000
LEAST_MARGIN = 30.0  # chi-square by which the best offset must beat any other
LEAST_RELATIVE_MARGIN = 0.005  # of the gain; what charge steps and mistaken links may cost the right offset
LEAST_GAIN = 40.0  # chi-square that the log must explain: one in 1e7 by chance over 1000 offsets
LONG_SEARCH, FEW_DROPLETS = 3000, 8  # offsets of a log of many minutes, for which fewer droplets must do
CLOCK_GAIN, MOST_OF_ONE = (
    60.0,
    50.0,
)  # chi-square by which another clock must be better to be told; of one droplet
SURE_GAIN, SURE_SHARE = 100.0, 0.01  # chi-square, and median share of what a drive explains, beyond doubt
DRIVEN = 20.0  # chi-square that a drive explains of a droplet that has a say on the clock
MOST_DROPLETS = 30  # longest tracks that are used; more narrow the offset below what matters


def fit_clock_offset(tracks: Tracks, log: Log, recording: Recording, bench: Bench) -> Field:
    """Find the clock offset of a log, and its rate where that shows, and give the field.

    Parameters
    ----------
    tracks : Tracks
        Linked with or without the voltage.
    log : Log
        On its own clock.
    recording : Recording
        Whose time is covered.
    bench : Bench
        Scale, exposure and gravity's direction if stated.

    Returns
    -------
    field : Field
        With source ``log``, `clock_offset`, its standard uncertainty, and `clock_rate`.

    Raises
    ------
    FieldError
        If the droplets do not follow the log at any offset, or follow it at several, as with a schedule that
        repeats; the message names the offsets.

    Notes
    -----
    For each offset, speed and drive of every droplet are fitted to its steps; the offset maximises the sum over
    droplets of the chi-square that the drive explains. First on a grid of 0.1 s over every offset at which the
    log covers half the recording, then 10 ms, then by the likelihood itself, whose width is the uncertainty. The
    offset holds at the middle of the recording.
    """
    span = recording_span(recording)
    idle = field_of_steps("log", [span[0]], [0.0], span=span)
    picture = Orientation(bench.down_deg or 0.0, 0.0, "picture")
    view = View.of(recording, idle, bench)
    found = paths(tracks, view, picture)
    usable = [path for path in found if len(path.steps) >= 2 * MIN_INCREMENTS]
    if not usable:
        raise FieldError(str(log.path), "no droplet is tracked long enough to set the log's clock; state it")
    usable = sorted(usable, key=len, reverse=True)[:MOST_DROPLETS]
    offsets = _search_range(log, span)
    searched = usable if len(offsets) < LONG_SEARCH else usable[:FEW_DROPLETS]
    gain = drive_gains(searched, log, offsets, recording).sum(axis=0)
    peaks = _peaks(offsets, gain)
    coarse = field_from_log(log, recording, offset=float(offsets[peaks[0]]))
    turned = fit_orientation(tracks, View.of(recording, coarse, bench), down_deg=bench.down_deg)
    if turned.origin == "drive":
        chosen = {path.droplet for path in usable}
        usable = [path for path in paths(tracks, view, turned) if path.droplet in chosen]
    fit = _Fit(usable, log, recording, view.exposure)
    return fit.field([float(offsets[i]) for i in peaks])


def clock_warnings(field: Field, droplets: Sequence[Path], recording: Recording) -> tuple[str, ...]:
    """Say if the droplets see the field change at other times than a list or a stated clock says.

    Parameters
    ----------
    field : Field
        From a list or a log.
    droplets : sequence of Path
        That are not rejected.
    recording : Recording
        Frame times.

    Returns
    -------
    warnings : tuple of str
        One line, if the field moved by two frames or more, half the recording at most, explains the motion of
        most of the driven droplets better, and of all by a chi-square of 60, of which one droplet gives 50 at most.

    Raises
    ------
    FieldError
        If the chi-square passes 100, and the field where it is said to be leaves 1 % or more unexplained of what
        the moved one explains of the middle droplet: no charge step or mistaken link does so. The message shows
        the times of both.
    """
    usable = sorted(droplets, key=len, reverse=True)[:MOST_DROPLETS]
    usable = [path for path in usable if len(path.steps) >= 2 * MIN_INCREMENTS]
    if field.source not in ("list", "log") or len(field.segments) < 2 or not usable:
        return ()
    log = Log(field.knot_times, field.knot_volts, True, recording.path)
    shifts = _shifts(recording)
    gains = drive_gains(usable, log, shifts, recording, falling=True)
    driven = gains.max(axis=1) > DRIVEN
    if not driven.any():
        return ()
    gains, usable = gains[driven], [path for path, has in zip(usable, driven, strict=True) if has]
    votes = gains - gains[:, :1]
    votes *= np.minimum(1.0, MOST_OF_ONE / np.maximum(votes.max(axis=1), 1e-9))[:, None]
    best = int(np.argmax(votes.sum(axis=0)))
    gain = float(votes[:, best].sum())
    if abs(shifts[best]) < 1.5 * recording.frame_interval or gain <= CLOCK_GAIN:
        return ()
    if np.mean(votes[:, best] > 0) <= 0.5:
        return ()
    found = _best_shifts(usable, log, shifts, recording)
    share = float(np.median(1 - gains[:, 0] / np.maximum(gains[:, best], DRIVEN)))
    if gain > SURE_GAIN and share > SURE_SHARE:
        raise FieldError(str(recording.path), _contradiction(field, found, len(usable), gain))
    late = "later" if found[0] > 0 else "earlier"
    return (
        f"the droplets see the field change about {abs(found[0]):.2f} s {late} than the {field.source} says;"
        " check its times",
    )


def _shifts(recording: Recording) -> FloatArray:
    """Shifts of a field in s: none, every frame within a second, then every tenth of a second to half the span."""
    step, half = recording.frame_interval, 0.5 * float(np.diff(recording_span(recording))[0])
    near = step * np.arange(1, int(min(1.0, half) / step) + 1)
    far = np.arange(1.0 + COARSE, half, COARSE)
    return np.concatenate(([0.0], near, -near, far, -far))


def _best_shifts(usable: Sequence[Path], log: Log, shifts: FloatArray, recording: Recording) -> list[float]:
    """Shifts in s, to 10 ms, that fit the droplets best; several where a schedule repeats, the shortest first."""
    shifts = np.sort(shifts)
    total = drive_gains(usable, log, shifts, recording, falling=True).sum(axis=0)
    near = [i for i in _peaks(shifts, total) if total[i] > 0.95 * total.max() - LEAST_MARGIN]
    found: list[tuple[float, float]] = []
    for i in near:
        fine = shifts[i] + np.arange(-COARSE, COARSE + FINE / 2, FINE)
        gain = drive_gains(usable, log, fine, recording, falling=True).sum(axis=0)
        found.append((float(gain.max()), float(fine[np.argmax(gain)])))
    needed = max(found)[0] - max(LEAST_MARGIN, LEAST_RELATIVE_MARGIN * max(found)[0])
    kept: list[float] = []
    for gain, shift in sorted(found, reverse=True):
        if gain >= needed and all(abs(shift - other) > 2 * COARSE for other in kept):
            kept.append(shift)
    return sorted(kept, key=abs)


def _contradiction(field: Field, shifts: Sequence[float], droplets: int, gain: float) -> str:
    """Times of the field as it is stated and as the droplets see it, in one line."""
    stated = [segment.start for segment in field.segments[1:5]]
    more = ", ..." if len(field.segments) > 5 else ""
    said = ", ".join(f"{time:.2f}" for time in stated)
    seen = ", ".join(f"{time + shifts[0]:.2f}" for time in stated)
    open_by = " or ".join(f"{shift:+.2f} s" for shift in shifts)
    if field.source == "log":
        clocks = " or ".join(f"{field.clock_offset + shift:.2f} s" for shift in shifts)
        what = f"field.clock_offset is {field.clock_offset:.2f} s, the droplets find about {clocks}"
    else:
        what = "correct field.list"
    return (
        f"the droplets contradict the {field.source}: it changes the field at {said}{more} s, {droplets} droplets"
        f" see that at {seen}{more} s (shifted by {open_by}; chi-square {gain:.0f} better); {what}"
    )


def _search_range(log: Log, span: tuple[float, float]) -> FloatArray:
    """Offsets at which the log covers at least half of the recording; a log of changes holds on after its last."""
    half = 0.5 * (span[1] - span[0])
    last = float(log.times[-1]) + (0.0 if log.sampled else half)
    low, high = span[0] + half - last, span[1] - half - float(log.times[0])
    if high <= low:
        problem = f"the log lasts {log.times[-1] - log.times[0]:.2f} s, less than half the recording's"
        raise FieldError(str(log.path), f"{problem} {span[1] - span[0]:.2f} s; state field.clock_offset")
    return np.arange(low, high + COARSE, COARSE)


def _peaks(offsets: FloatArray, gain: FloatArray, *, most: int = 6) -> list[int]:
    """Local maxima of the gain, highest first."""
    inner = np.concatenate(([-np.inf], gain, [-np.inf]))
    top = np.flatnonzero((gain >= inner[:-2]) & (gain >= inner[2:]))
    return [int(i) for i in top[np.argsort(gain[top])[::-1]][:most]] or [int(np.argmax(gain))]


@dataclass(frozen=True, slots=True)
class _Droplet:
    """One droplet's steps with what their whitening needs."""

    steps: Increments
    frames: IntArray  # of the sightings
    diffusion: float
    rho: float


class _Fit:
    """Likelihood of offset and rate of a log, all droplets together."""

    def __init__(self, usable: list[Path], log: Log, recording: Recording, exposure: float) -> None:
        self.usable, self.log, self.recording, self.exposure = usable, log, recording, exposure
        self.middle = 0.5 * sum(recording_span(recording))
        self.droplets: list[_Droplet] = []

    def impulse(self, offset: float, rate: float) -> FloatArray:
        """Exposure average of the voltage's time integral at every frame."""
        times = on_recording_clock(np.asarray(self.log.times), offset=offset, rate=rate, middle=self.middle)
        volts = np.asarray(self.log.volts)
        if not self.log.sampled:
            times, volts = np.repeat(times, 2)[1:], np.repeat(volts, 2)[:-1]
        return field_impulse(times, volts, self.recording.frame_times, self.exposure)

    def prepare(self, offset: float) -> None:
        """Find diffusion and noise of every droplet with the log at one offset."""
        impulse = self.impulse(offset, 0.0)
        self.droplets = []
        for path in self.usable:
            steps = path.steps
            driven = _with_impulse(steps, impulse[path.frames])
            fit = free_fit(driven)
            self.droplets.append(_Droplet(steps, path.frames, fit.diffusion, float(np.exp(fit.log_rho))))

    def gain(self, offset: float, rate: float = 0.0) -> float:
        """Chi-square that the drives explain, less the penalty of an unlikely rate."""
        impulse = self.impulse(offset, rate)
        total = -((rate / RATE_STD) ** 2)
        for droplet in self.droplets:
            seconds = np.diff(impulse[droplet.frames])[droplet.steps.first]
            white = whitened(
                droplet.steps, diffusion=droplet.diffusion, rho=droplet.rho,
                columns=np.column_stack([droplet.steps.dt, seconds]),
            )  # fmt: skip
            total += _explained(white.columns[:, 0], white.columns[:, 1], white.data)
        return total

    def field(self, starts: list[float]) -> Field:
        """Best offset among the peaks of the first search, checked against the others, as a field."""
        self.prepare(starts[0])
        tops = sorted((self._climb(start) for start in starts), reverse=True)
        best_gain, best = tops[0]
        self.prepare(best)
        self._check(best_gain, best, [(gain, at) for gain, at in tops[1:] if abs(at - best) > 2 * COARSE])
        offset, rate = self._polish(best)
        mean, std = self._width(offset, rate)
        return field_from_log(self.log, self.recording, offset=mean, offset_std=std, rate=rate)

    def _climb(self, start: float) -> tuple[float, float]:
        """Best offset within a coarse step of a start, to 10 ms."""
        grid = start + np.arange(-COARSE, COARSE + FINE / 2, FINE)
        gains = [self.gain(float(offset)) for offset in grid]
        top = int(np.argmax(gains))
        return gains[top], float(grid[top])

    def _check(self, gain: float, best: float, rivals: list[tuple[float, float]]) -> None:
        """Refuse a log that explains nothing, or that fits as well elsewhere."""
        if gain < LEAST_GAIN:
            problem = f"the droplets do not follow the log at any clock offset (best {best:.2f} s)"
            raise FieldError(str(self.log.path), f"{problem}; state field.clock_offset or another source")
        needed = max(LEAST_MARGIN, LEAST_RELATIVE_MARGIN * gain)
        near = [at for other, at in rivals if gain - other < needed]
        if near:
            others = ", ".join(f"{at:.2f} s" for at in near)
            problem = f"the clock offset is ambiguous: {best:.2f} s fits the droplets, and so does {others}"
            raise FieldError(
                str(self.log.path), f"{problem}; the schedule repeats, so state field.clock_offset"
            )

    def _polish(self, best: float) -> tuple[float, float]:
        """Offset, and rate if it improves the fit, at the top of the likelihood."""
        from scipy.optimize import minimize, minimize_scalar

        alone = minimize_scalar(lambda x: -self.gain(float(x)), bounds=(best - FINE, best + FINE), method="bounded",
                                options={"xatol": 1e-5})  # fmt: skip
        start = np.array([[alone.x, 0.0], [alone.x + 2e-3, 0.0], [alone.x, RATE_STD]])
        both = minimize(lambda p: -self.gain(float(p[0]), float(p[1])), start[0], method="Nelder-Mead",
                        options={"initial_simplex": start, "xatol": 1e-5, "fatol": 0.02, "maxfev": 90})  # fmt: skip
        if alone.fun - both.fun > RATE_GAIN:
            return float(both.x[0]), float(both.x[1])
        return float(alone.x), 0.0

    def _width(self, offset: float, rate: float) -> tuple[float, float]:
        """Mean and standard deviation of the offset under its likelihood."""
        top, reach = self.gain(offset, rate), 1e-3
        while (
            reach < COARSE
            and min(self.gain(offset - reach, rate), self.gain(offset + reach, rate)) > top - 12
        ):
            reach *= 2
        grid = offset + np.linspace(-reach, reach, 25)
        gains = np.array([self.gain(float(x), rate) for x in grid])
        weight = np.exp(0.5 * (gains - gains.max()))
        weight /= weight.sum()
        mean = float(weight @ grid)
        spacing = grid[1] - grid[0]
        # A jump may lie anywhere between two readings. A supply that is switched at whole steps of the log's pace
        # puts all jumps at the same place between them, so their number does not lessen it.
        sampling = self.log.interval**2 / 12
        return mean, float(np.sqrt(weight @ (grid - mean) ** 2 + spacing**2 / 12 + sampling))


def _explained(drift: FloatArray, drive: FloatArray, data: FloatArray) -> float:
    """Chi-square that the drive explains, less that of a droplet which would rise with the field off.

    The second tells a schedule from the same one with on and off exchanged.
    """
    free = drive - drift * (drift @ drive) / (drift @ drift)
    power = float(free @ free)
    if power <= 1e-9 * float(drive @ drive):
        return 0.0
    gain = float(free @ data) ** 2 / power
    alone = drift - drive * (drift @ drive) / (drive @ drive)
    rise = min(float(alone @ data), 0.0)
    return gain - rise**2 / float(alone @ alone)


def _with_impulse(steps: Increments, impulse: FloatArray) -> Increments:
    """Give steps whose volt seconds are those of the sightings."""
    return replace(steps, impulse=np.diff(impulse)[steps.first])
