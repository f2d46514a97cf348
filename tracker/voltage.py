"""Voltage over time and the links of one recording: each may need the other.

A list, a lamp or a log with a known clock gives the voltage first, and the links use it. Where the clock or the
toggles must come from the droplets, droplets are linked without the voltage, the field is found, and they are
linked again.
"""

from __future__ import annotations

from tracker.bench import Bench
from tracker.errors import FieldError
from tracker.motion.field import compare_fields, exposure_of, field_from_lamp, field_from_list
from tracker.motion.fieldclock import fit_clock_offset
from tracker.motion.fieldlog import Log, field_from_log, read_log
from tracker.records import Field, FloatArray, Recording, Seen, Settings, Tracks
from tracker.seeing.link import link


def field_and_tracks(seen: Seen, bench: Bench, settings: Settings) -> tuple[Field, Tracks]:
    """Find the voltage over time and link sightings to tracks.

    Parameters
    ----------
    seen : Seen
        What the seeing wing found.
    bench : Bench
        Its `field` says where the voltage comes from; every further source that it names is compared.
    settings : Settings
        For the links.

    Returns
    -------
    field : Field
        From the chosen source.
    tracks : Tracks
        Linked with that voltage.

    Raises
    ------
    FieldError
        If the field cannot be had, or two sources disagree; the message shows both.
    """
    spec = bench.field
    if spec.source in ("list", "lamp") or (spec.source == "log" and spec.clock_offset is not None):
        field = known_field(spec.source, seen.recording, bench, lamp=seen.lamp)
    else:
        field = field_of_tracks(link(seen, field=None, settings=settings), seen.recording, bench)
    from tracker.motion.fieldmotion import sharpened

    tracks = link(seen, field=field, settings=settings)
    compare_sources(field, tracks, seen.recording, bench, lamp=seen.lamp)
    return sharpened(field, tracks, seen.recording, bench), tracks


def compare_sources(
    field: Field, tracks: Tracks, recording: Recording, bench: Bench, *, lamp: FloatArray | None = None
) -> None:
    """Compare the field with every further source that the bench file gives.

    Parameters
    ----------
    field : Field
        From the chosen source; the clock of its log is fitted already.
    tracks : Tracks
        By which the clock of a further log is set where the bench file leaves it open.
    recording : Recording
        Whose time is covered.
    bench : Bench
        With the sources.
    lamp : ndarray of shape (frames,), optional
        Mean grey of the lamp's rectangle; without it the lamp is not compared.

    Raises
    ------
    FieldError
        If two sources disagree; the message shows both.
    """
    for other in _other_sources(bench, lamp=lamp is not None):
        compare_fields(field, known_field(other, recording, bench, lamp=lamp), recording)
    spec = bench.field
    if spec.source != "log" and spec.log is not None and spec.clock_offset is None:
        compare_fields(field, fit_clock_offset(tracks, _log(bench, recording), recording, bench), recording)


def known_field(source: str, recording: Recording, bench: Bench, *, lamp: FloatArray | None = None) -> Field:
    """Give the field of a source that does not need the droplets.

    Parameters
    ----------
    source : str
        ``list``, ``lamp``, or ``log`` with a stated clock offset.
    recording : Recording
        Whose time is covered.
    bench : Bench
        With the source's keys.
    lamp : ndarray of shape (frames,), optional
        Mean grey of the lamp's rectangle.

    Returns
    -------
    field : Field
        Voltage over the recording's time.
    """
    spec = bench.field
    if source == "list":
        return field_from_list(spec.entries, recording)
    if source == "lamp":
        if lamp is None or bench.voltage is None:
            raise FieldError(
                str(recording.path), "the lamp needs field.lamp and cell.voltage in the bench file"
            )
        return field_from_lamp(
            lamp, recording, exposure=exposure_of(bench, recording), voltage=bench.voltage.value
        )
    if spec.clock_offset is None:
        raise FieldError(str(recording.path), "the log needs field.clock_offset in the bench file")
    log = _log(bench, recording)
    return field_from_log(log, recording, offset=spec.clock_offset.value, offset_std=spec.clock_offset.std)


def field_of_tracks(tracks: Tracks, recording: Recording, bench: Bench) -> Field:
    """Give the field whose clock or toggles come from the droplets.

    Parameters
    ----------
    tracks : Tracks
        Linked with or without the voltage.
    recording : Recording
        Whose time is covered.
    bench : Bench
        Source ``motion``, or ``log`` with its clock to be fitted.

    Returns
    -------
    field : Field
        Voltage over the recording's time.
    """
    spec = bench.field
    if spec.source == "log" and spec.log is not None:
        return fit_clock_offset(tracks, _log(bench, recording), recording, bench)
    if bench.voltage is None:
        raise FieldError(str(recording.path), "toggles from motion need cell.voltage in the bench file")
    from tracker.motion.fieldmotion import field_from_motion

    return field_from_motion(tracks, recording, bench)


def _log(bench: Bench, recording: Recording) -> Log:
    """Read the log that the bench file names."""
    spec = bench.field
    if spec.log is None:
        raise FieldError(str(recording.path), "the log needs field.log in the bench file")
    return read_log(spec.log, time_column=spec.time_column, voltage_column=spec.voltage_column,
                    time_unit=spec.time_unit, voltage_unit=spec.voltage_unit)  # fmt: skip


def _other_sources(bench: Bench, *, lamp: bool) -> list[str]:
    """Name the sources, beside the chosen one, that the bench file gives and that need no droplets."""
    spec = bench.field
    given = {"list": bool(spec.entries), "lamp": lamp,
             "log": spec.log is not None and spec.clock_offset is not None}  # fmt: skip
    return [source for source, there in given.items() if there and source != spec.source]
