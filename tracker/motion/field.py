"""Voltage over the time of one recording: from a list or a lamp; comparison of two sources.

Logs are read in `fieldlog`, toggles are found in the droplets' motion in `fieldmotion`; all give one `Field`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike

from tracker.bench import Bench
from tracker.errors import FieldError
from tracker.records import Field, FloatArray, Recording, Segment

LEAST_SEPARABILITY = (
    0.85  # of lamp grey values; one Gaussian split at its mean reaches 0.64, a uniform spread 0.75
)
LEAST_RUN = 3  # frames; a lamp that changes for less is flicker
SAME_VOLTAGE = 0.1  # of the largest voltage: nearer voltages of two sources are the same
SHARP = 0.1  # of the frame interval: a toggle known so well counts as known
SATURATED = 0.98  # of full scale: a lit lamp above does not tell how long it was lit


def recording_span(recording: Recording) -> tuple[float, float]:
    """Time that the frames cover.

    Parameters
    ----------
    recording : Recording
        With at least one frame.

    Returns
    -------
    start, end : float
        First frame time, and last frame time plus one frame interval, in s.
    """
    times = recording.frame_times
    return float(times[0]), float(times[-1] + (recording.frame_interval or 1.0))


def exposure_of(bench: Bench, recording: Recording) -> float:
    """Exposure of each frame, for the times at which the field acts.

    Parameters
    ----------
    bench : Bench
        May state it.
    recording : Recording
        Else half its frame interval is taken.

    Returns
    -------
    exposure : float
        In s; never longer than the shortest frame interval.
    """
    stated = 0.5 * recording.frame_interval if bench.exposure is None else bench.exposure.value
    return min(stated, _shortest_interval(recording))


def blur_of(bench: Bench, recording: Recording) -> float:
    """Exposure that the blur of Brownian motion is worked out with.

    Parameters
    ----------
    bench : Bench
        May state the exposure.
    recording : Recording
        Else its shortest frame interval is taken: no exposure is longer, and what a shorter one blurs less is
        fitted as place noise, exactly. Half the interval in place of the whole would make D of a shutter that is
        always open too small by a third.

    Returns
    -------
    blur : float
        In s.
    """
    if bench.exposure is not None:
        return exposure_of(bench, recording)
    return min(recording.frame_interval, _shortest_interval(recording))


def _shortest_interval(recording: Recording) -> float:
    """Shortest frame interval in s; infinite for a single frame."""
    return float(np.min(np.diff(recording.frame_times), initial=np.inf))


def field_from_list(
    entries: Sequence[tuple[float, float]], recording: Recording, *, toggle_std: float = 0.0
) -> Field:
    """Voltage from a list of times and voltages; each voltage holds until the next time.

    Parameters
    ----------
    entries : sequence of (time, voltage)
        Times in s on the recording's clock, increasing; voltages in V.
    recording : Recording
        Whose time is covered. Entries after its end are left out.
    toggle_std : float, optional
        Standard uncertainty of the times in s, independent from one toggle to the next.

    Returns
    -------
    field : Field
        With source ``list``.

    Raises
    ------
    FieldError
        If the list is empty or begins after the first frame.
    """
    start, end = recording_span(recording)
    if not entries:
        raise FieldError(str(recording.path), 'field.list is empty: give pairs such as ["0 s", "0 V"]')
    if entries[0][0] > start + 0.5 * recording.frame_interval:
        problem = f"field.list begins at {entries[0][0]:g} s, after the first frame at {start:g} s"
        raise FieldError(str(recording.path), f"{problem}: say which voltage it starts with")
    times = np.array([max(entries[0][0], start)] + [entry[0] for entry in entries[1:]])
    volts = np.array([entry[1] for entry in entries])
    return field_of_steps("list", times, volts, span=(start, end), toggle_std=toggle_std)


def field_of_steps(
    source: str, times: ArrayLike, volts: ArrayLike, *, span: tuple[float, float],
    toggle_std: ArrayLike = 0.0, sign_known: bool = True,
) -> Field:  # fmt: skip
    """Field that jumps between constant voltages.

    Parameters
    ----------
    source : str
        ``list``, ``log``, ``lamp`` or ``motion``.
    times : array_like of shape (N,)
        Start of each voltage in s, increasing; the first holds also before its time.
    volts : array_like of shape (N,)
        In V. Neighbours that are equal are joined.
    span : tuple of float
        Start and end of the recording in s; segments are cut to it.
    toggle_std : array_like, shape () or (N,)
        Standard uncertainty of each time in s; the one of the first time is not used.
    sign_known : bool, optional
        False if all voltages may have the other sign.

    Returns
    -------
    field : Field
        Segments and knots of the jumps inside the span.
    """
    when, value = np.asarray(times, float), np.asarray(volts, float)
    std = np.broadcast_to(np.asarray(toggle_std, float), when.shape)
    change = np.concatenate(([True], np.diff(value) != 0))
    when, value, std = when[change], value[change], std[change]
    first = int(np.searchsorted(when[1:], span[0], side="right"))  # the voltage that holds at the start
    last = max(int(np.searchsorted(when, span[1], side="left")), first + 1)
    when, value, std = when[first:last], value[first:last], std[first + 1 : last]
    bounds = np.concatenate(([span[0]], when[1:], [span[1]]))
    segments = tuple(
        Segment(float(bounds[i]), float(bounds[i + 1]), float(value[i])) for i in range(len(value))
    )
    knots = np.concatenate(([span[0]], np.repeat(when[1:], 2)))
    knot_volts = np.concatenate(([value[0]], np.ravel(np.column_stack((value[:-1], value[1:])))))
    return Field(source, segments, knots, knot_volts, std, sign_known=sign_known)


def voltage_at(field: Field, times: ArrayLike) -> FloatArray:
    """Voltage at each time.

    Parameters
    ----------
    field : Field
        Straight lines between its knots.
    times : array_like
        In s.

    Returns
    -------
    volts : ndarray
        In V; at a jump, one of the two sides.
    """
    volts: FloatArray = np.interp(np.asarray(times, float), field.knot_times, field.knot_volts)
    return volts


def uncertain_spans(field: Field, *, frame_interval: float, coverage: float = 3.0) -> FloatArray:
    """Stretches of time in which the voltage may be the one or the other.

    Parameters
    ----------
    field : Field
        Its `toggle_std` and `clock_offset_std` say how well each toggle is known.
    frame_interval : float
        In s. A toggle known to a tenth of it misplaces the droplets by at most a tenth of what the drive moves them
        in one frame, and gives no stretch.
    coverage : float, optional
        Half width of a stretch in standard uncertainties.

    Returns
    -------
    spans : ndarray of shape (T, 2)
        Start and end of each stretch in s.
    """
    spans = []
    for before, after, std in zip(field.segments, field.segments[1:], field.toggle_std, strict=False):
        known = float(np.hypot(std, field.clock_offset_std))
        if known > SHARP * frame_interval:
            spans.append((before.end - coverage * known, after.start + coverage * known))
    return np.array(spans, dtype=float).reshape(-1, 2)


def field_from_lamp(
    grey: ArrayLike, recording: Recording, *, exposure: float, voltage: float, full_scale: float | None = None
) -> Field:
    """Voltage from a lamp in the picture that is lit while the field is on.

    Parameters
    ----------
    grey : array_like of shape (frames,)
        Mean grey value of the lamp's rectangle in each frame.
    recording : Recording
        Frame times, taken as the start of the exposure.
    exposure : float
        Of one frame in s.
    voltage : float
        Of the field-on state in V.
    full_scale : float, optional
        Grey value at saturation; taken from the recording if not given. A saturated lamp does not tell for
        which part of the exposure it was lit.

    Returns
    -------
    field : Field
        With source ``lamp``. A toggle inside an exposure is placed by the grey value of the half-lit frame,
        one between two exposures in the middle with the standard deviation of a uniform distribution.

    Raises
    ------
    FieldError
        If the grey values do not fall into a dark and a lit group.

    Notes
    -----
    The threshold is the one that maximises the variance between the two groups; the share of the variance
    that it explains must reach 0.85. Changes shorter than three frames are flicker.

    References
    ----------
    .. [1] N. Otsu, IEEE Trans. Syst. Man Cybern. 9 (1979), 62-66.
    """
    values = np.asarray(grey, float)
    times = recording.frame_times
    if values.shape != times.shape:
        raise ValueError(f"grey has shape {values.shape}, the recording {times.shape} frames")
    threshold, separability = _two_groups(values)
    if separability < LEAST_SEPARABILITY:
        problem = f"the lamp is not seen to change: its grey values {values.min():.4g} to {values.max():.4g}"
        raise FieldError(str(recording.path), f"{problem} are one group; check field.lamp")
    lit = _without_flicker(values > threshold)
    ceiling = SATURATED * (recording.full_scale if full_scale is None else full_scale)
    changes = np.flatnonzero(np.diff(lit.astype(int)))
    edges = np.concatenate(([0], changes + 1, [len(lit)]))
    toggles = [_lamp_toggle(values, times, (int(edges[i]), int(edges[i + 1]), int(edges[i + 2])),
                            exposure=exposure, ceiling=ceiling) for i in range(len(changes))]  # fmt: skip
    start, end = recording_span(recording)
    when = np.array([start] + [toggle[0] for toggle in toggles])
    std = np.array([0.0] + [toggle[1] for toggle in toggles])
    volts = np.where(lit[edges[:-1]], voltage, 0.0)
    return field_of_steps("lamp", when, volts, span=(start, end), toggle_std=std)


def _two_groups(values: FloatArray) -> tuple[float, float]:
    """Threshold of largest variance between two groups, and the share of the variance that it explains."""
    order = np.sort(values)
    total = np.sum((order - order.mean()) ** 2)
    if len(order) < 2 or total <= 0:
        return float(order[0]), 0.0
    below = np.cumsum(order)[:-1]
    count = np.arange(1, len(order))
    low, high = below / count, (order.sum() - below) / (len(order) - count)
    between = count * (len(order) - count) / len(order) * (high - low) ** 2
    best = int(np.argmax(between))
    return float(0.5 * (low[best] + high[best])), float(between[best] / total)


def _without_flicker(lit: np.ndarray) -> np.ndarray:
    """Join runs shorter than `LEAST_RUN` frames to what stands before them (the first to what follows)."""
    lit = lit.copy()
    while True:
        edges = np.concatenate(([0], np.flatnonzero(np.diff(lit.astype(int))) + 1, [len(lit)]))
        runs = np.diff(edges)
        inner = np.arange(len(runs)) if len(runs) > 1 else np.empty(0, int)
        short = inner[runs[inner] < LEAST_RUN]
        if len(short) == 0:
            return lit
        i = int(short[np.argmin(runs[short])])
        lit[edges[i] : edges[i + 1]] = ~lit[edges[i] : edges[i + 1]]


def _lamp_toggle(
    grey: FloatArray, times: FloatArray, edges: tuple[int, int, int], *, exposure: float, ceiling: float
) -> tuple[float, float]:
    """Time and standard uncertainty in s of the toggle at frame `edges[1]`, from half-lit frames there."""
    first, k, last = edges
    before, after = (
        grey[max(first, k - 12) : max(k - 1, first + 1)],
        grey[min(k + 1, last - 1) : min(k + 12, last)],
    )
    level = np.array([np.median(before), np.median(after)])
    height = level[1] - level[0]
    spread = [1.4826 * np.median(np.abs(part - np.median(part))) for part in (before, after)]
    share_std = max(float(max(spread)) / abs(height), 1e-3)
    share = (grey[[k - 1, k]] - level[0]) / height  # part of the exposure after the toggle, if it is inside
    half = share_std * 4.0 + 0.02
    inside = [k - 1 + i for i in (0, 1) if half < share[i] < 1 - half]
    saturated = level.max() >= ceiling
    if not inside:
        # A saturated lamp looks fully lit in a frame that it is lit for in part.
        opened = times[k - 1] + (0.0 if saturated and height < 0 else exposure)
        closed = times[k] + (exposure if saturated and height > 0 else 0.0)
        # Shares below `half` cannot be told, so the toggle may lie that far inside either exposure.
        width = max(closed - opened, 0.0) + 2 * half * exposure
        return float(0.5 * (opened + closed)), float(width / np.sqrt(12))
    frame = inside[0]
    if saturated:
        return float(times[frame] + 0.5 * exposure), float(exposure / np.sqrt(12))
    return float(times[frame] + exposure * (1 - share[frame - k + 1])), float(exposure * share_std)


def compare_fields(first: Field, second: Field, recording: Recording) -> None:
    """Refuse two sources of voltage that contradict each other.

    Parameters
    ----------
    first, second : Field
        Of the same recording. A field whose sign is not known is compared with the sign that fits better.
    recording : Recording
        The voltages are compared at its frames, except those within three standard uncertainties, and one
        frame interval, of a toggle of either.

    Raises
    ------
    FieldError
        With what both say, and the first time at which they differ.
    """
    times, interval = recording.frame_times, recording.frame_interval
    clear = np.ones(len(times), bool)
    for field in (first, second):
        for before, after, std in zip(field.segments, field.segments[1:], field.toggle_std, strict=False):
            width = 3 * float(np.hypot(std, field.clock_offset_std)) + interval
            clear &= (times < before.end - width) | (times > after.start + width)
    one, two = voltage_at(first, times), voltage_at(second, times)
    if not (first.sign_known and second.sign_known) and np.sum(one[clear] * two[clear]) < 0:
        two = -two
    scale = max(float(np.max(np.abs(one))), float(np.max(np.abs(two))))
    wrong = np.flatnonzero(clear & (np.abs(one - two) > SAME_VOLTAGE * scale))
    if len(wrong):
        k = int(wrong[0])
        problem = (
            f"{first.source} and {second.source} disagree in {len(wrong)} of {len(times)} frames,"
            f" first at {times[k]:.3f} s: {one[k]:.4g} V against {two[k]:.4g} V;"
            f" {describe(first)}; {describe(second)}"
        )
        raise FieldError(str(recording.path), problem)


def describe(field: Field, *, most: int = 6) -> str:
    """Say in one line what a field is.

    Parameters
    ----------
    field : Field
        To be told.
    most : int, optional
        Segments that are listed.

    Returns
    -------
    text : str
        Source, then start and voltage of the first segments.
    """
    told = ", ".join(
        f"{segment.voltage:.4g} V from {segment.start:.3f} s" for segment in field.segments[:most]
    )
    more = f", and {len(field.segments) - most} more" if len(field.segments) > most else ""
    return f"{field.source}: {told}{more}"
