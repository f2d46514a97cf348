"""The whole evaluation: charges, numbers, reasons and rows of simulated droplets with known truth."""

from __future__ import annotations

import json
import pickle
import re
from dataclasses import replace

import numpy as np
import pytest
from happening_droplets import Camera, Life, evaporated, made_bench, made_tracks, schedule

from physics.droplet import ELEMENTARY_CHARGE
from tracker.errors import FieldError
from tracker.keeping.tables import CHANGES, DROPLETS, SEGMENTS, table
from tracker.motion.analysis import Given
from tracker.motion.droplets import evaluate_droplets
from tracker.motion.field import field_from_list
from tracker.records import Decision, Flag, Settings

CAMERA = Camera(seconds=24.0, steps=schedule(4e4))


def given(recording, bench):
    return Given(recording, field_from_list(bench.field.entries, recording), bench, Settings())


def evaluate(tmp_path, rng, lives, *, camera=CAMERA, decisions=(), flags=None, **motion):
    tracks, recording = made_tracks(rng, lives, camera, **motion)
    if flags is not None:
        tracks = replace(tracks, sightings=replace(tracks.sightings, flags=flags(tracks)))
    bench = made_bench(tmp_path, camera)
    return evaluate_droplets(tracks, given(recording, bench), decisions=decisions)


def cluster(rng, count):
    signs = rng.choice([-1, 1], count)
    radii, numbers = rng.uniform(0.5e-6, 1.0e-6, count), rng.integers(1, 7, count) * signs
    return [Life(float(r), int(n)) for r, n in zip(radii, numbers, strict=True)]


@pytest.fixture(scope="module")
def crowd(tmp_path_factory):
    """Sixty steady droplets in six recordings, with their truth."""
    rng = np.random.default_rng(81)
    folder = tmp_path_factory.mktemp("crowd")
    made = []
    for _ in range(6):
        lives = cluster(rng, 10)
        made.append((lives, evaluate(folder, rng, lives, air=(0.0, 3e-7), tilt_deg=1.5)))
    return made


def test_charges_and_radii_pull_about_the_truth(crowd):
    """Error over own uncertainty has unit variance for charge and radius, signs included."""
    charge, radius = [], []
    for lives, found in crowd:
        for life, row in zip(lives, found.droplets, strict=True):
            charge.append((row.charge_c - life.number * ELEMENTARY_CHARGE) / row.charge_own_std_c)
            radius.append((row.radius_m - life.radius) / row.radius_std_m)
    # 60 pulls: rms within 4 / sqrt(120) of 1; the air of each recording adds a part that ten droplets share.
    assert np.sqrt(np.mean(np.square(charge))) == pytest.approx(1.0, abs=4 / np.sqrt(120))
    assert np.sqrt(np.mean(np.square(radius))) == pytest.approx(1.0, abs=4 / np.sqrt(120))


def test_charge_numbers_are_right_and_most_droplets_are_kept(crowd):
    """At least 57 of 60 numbers right at these sizes, all that are called certain; at most three droplets doubted."""
    pairs = [pair for lives, found in crowd for pair in zip(lives, found.droplets, strict=True)]
    right = [row.charge_number == life.number for life, row in pairs]
    sure = [good for good, (_, row) in zip(right, pairs, strict=True) if row.charge_number_probability > 0.99]
    assert sum(right) >= 57
    assert all(sure)
    # Five tests at 1 in 1000 make 0.3 doubted of 60.
    assert sum(row.verdict != "keep" for _, found in crowd for row in found.droplets) <= 3


def test_own_and_shared_parts_add_in_quadrature_and_the_shared_one_moves_all_alike(crowd):
    """The shared part is the bench's: 0.1 % of gap, 0.83 % of voltage and what scale, air and oil give."""
    for _, found in crowd:
        for row in found.droplets:
            assert row.charge_std_c == pytest.approx(np.hypot(row.charge_own_std_c, row.charge_shared_std_c))
            share = row.charge_shared_std_c / abs(row.charge_c)
            assert 0.002 < share < 0.02
        assert found.budget["charge_factor_std"] == pytest.approx(
            np.median([row.charge_shared_std_c / abs(row.charge_c) for row in found.droplets]), rel=0.2
        )
        slopes = np.array(list(found.budget["log_charge_sensitivities"].values()))
        assert slopes.shape == (10, 10)
        assert slopes[:, found.budget["inputs"].index("plate_gap")] == pytest.approx(np.ones(10))
        # d ln q / d ln scale is 1.6 where the fall speed alone gives the radius and -1 where Brownian motion does;
        # at 0.75 um and more the latter has less than a fifth of the say, in air known to 1 um/s or so.
        large = np.array([row.radius_m > 0.75e-6 for row in found.droplets])
        scale = slopes[:, found.budget["inputs"].index("scale")]
        assert np.all(scale[large] == pytest.approx(1.6, abs=0.2 * 2.6))
        assert np.all((scale > -1) & (scale < 1.75))


def test_rows_fill_the_tables_and_provenance_is_plain(crowd):
    """Every column has its attribute; what goes into recording.json is JSON; all of it pickles."""
    _, found = crowd[0]
    for rows, columns in ((found.droplets, DROPLETS), (found.segments, SEGMENTS), (found.changes, CHANGES)):
        assert len(table(rows, columns)) == len(rows)
    for part in (found.orientation, found.air_current, found.charge_unit, found.budget, found.details):
        json.dumps(part, allow_nan=False)
    assert pickle.loads(pickle.dumps(found)).droplets == found.droplets
    assert found.exposure == pytest.approx(CAMERA.exposure)
    assert found.orientation["down_deg"] == pytest.approx(1.5, abs=4 * found.orientation["down_deg_std"])


def test_segment_speeds_are_those_of_fall_and_drive(crowd):
    """Each droplet has a row for each of eight segments; field-off speeds agree with the fall speed."""
    pulls = []
    for _, found in crowd:
        assert len(found.segments) == 80
        fall = {row.droplet: row.fall_speed_m_s for row in found.droplets}
        for row in found.segments:
            assert 70 <= row.frames <= 95  # 90 frames a segment, 5 % missing
            if row.voltage_v == 0:
                pulls.append((row.down_speed_m_s - fall[row.droplet]) / row.down_speed_std_m_s)
    # The fall speed rests on the segment too, and is known four times better: rms a little below 1.
    assert 0.75 < np.sqrt(np.mean(np.square(pulls))) < 1.15


def reasons(found):
    return {row.droplet: set(row.reasons) for row in found.droplets}


def test_what_happens_to_a_droplet_is_told_and_changes_the_verdict_as_registered(tmp_path):
    """Step and evaporation are notes, a switch and strange Brownian motion are doubts; neutral is charge number 0."""
    lives = [
        Life(0.7e-6, 4, changes=((12.0, 0.7e-6, 6),)),
        evaporated(Life(1.0e-6, 5), 0.15, 24.0),
        Life(0.7e-6, 3, changes=((13.0, 1.05e-6, -6),)),
        Life(0.8e-6, -4, diffusion_factor=2.0),
        Life(0.8e-6, 0),
        Life(0.6e-6, 2), Life(0.9e-6, -5), Life(0.7e-6, 3),
    ]  # fmt: skip
    found = evaluate(tmp_path, np.random.default_rng(82), lives)
    codes = reasons(found)
    assert "charge_step" in codes[0]
    assert "evaporation" in codes[1]
    assert "switch" in codes[2]
    assert "diffusion" in codes[3]
    assert "neutral" in codes[4]
    assert [row.verdict for row in found.droplets] == [
        "keep",
        "keep",
        "doubt",
        "doubt",
        "keep",
        "keep",
        "keep",
        "keep",
    ]
    assert found.droplets[4].charge_number == 0
    step = next(row for row in found.changes if row.droplet == 0 and row.kind == "charge_step")
    own = found.droplets[0].charge_own_std_c
    assert step.before_c == pytest.approx(4 * ELEMENTARY_CHARGE, abs=5 * own)
    assert step.after_c == pytest.approx(6 * ELEMENTARY_CHARGE, abs=5 * own)
    assert found.details["charge_parts"]["0"]["charge_c"] == pytest.approx([step.before_c, step.after_c])
    trend = found.details["trends"][0]
    assert trend["log_radius_rate_1_s"] == pytest.approx(
        np.log(0.85) / 24, abs=4 * trend["log_radius_rate_std_1_s"]
    )
    assert found.droplets[1].radius_m == pytest.approx(1.0e-6, abs=4 * found.droplets[1].radius_std_m)


def test_droplets_that_cannot_give_a_charge_keep_their_row_with_the_reason(tmp_path):
    """Too short, never in the field, always in it, stuck: empty cells, a reason, rejected; nothing is lost."""
    lives = [
        Life(0.7e-6, 4, end=0.3), Life(0.7e-6, 4, end=2.9), Life(0.7e-6, 4, begin=3.2, end=5.9),
        Life(0.6e-6, 2), Life(0.9e-6, -5),
    ]  # fmt: skip
    found = evaluate(tmp_path, np.random.default_rng(83), lives)
    codes = reasons(found)
    for number, code in enumerate(("too_short", "never_field_on", "one_voltage")):
        row = found.droplets[number]
        assert code in codes[number]
        assert row.verdict == "reject"
        assert np.isnan(row.charge_c)
        assert row.charge_number is None
    assert np.isnan(found.droplets[0].fall_speed_m_s)
    assert found.droplets[1].radius_m == pytest.approx(0.7e-6, abs=4 * found.droplets[1].radius_std_m)


def test_dirt_is_stuck_and_rises_are_not_droplets(tmp_path):
    """A spot that only jitters by its noise is stuck; one that rises with the field off does not fall."""
    rng = np.random.default_rng(84)
    lives = [Life(0.7e-6, 4), Life(0.9e-6, -5), Life(0.8e-6, 2), Life(0.7e-6, -2)]
    tracks, recording = made_tracks(rng, lives, CAMERA)
    first, second = tracks.rows(0), tracks.rows(1)
    x, y = tracks.sightings.x.copy(), tracks.sightings.y.copy()
    count = first.stop - first.start
    x[first], y[first] = 50 + 0.05 * rng.standard_normal(count), 60 + 0.05 * rng.standard_normal(count)
    y[second] = y[second] - 2 * 40.0 * recording.frame_times[tracks.sightings.frame[second]]
    bench = made_bench(tmp_path, CAMERA)
    found = evaluate_droplets(
        replace(tracks, sightings=replace(tracks.sightings, x=x, y=y)), given(recording, bench)
    )
    codes = reasons(found)
    assert codes[0] == {"stuck"}
    assert "not_falling" in codes[1]
    assert [row.verdict for row in found.droplets] == ["reject", "reject", "keep", "keep"]
    assert not found.used[first].any()
    assert found.used[tracks.rows(2)].all()


@pytest.mark.parametrize(
    ("flag", "code", "share"),
    [(Flag.SOFT, "out_of_focus", 0.6), (Flag.SATURATED, "saturated", 0.6), (Flag.MERGED, "merged", 0.3),
     (Flag.EDGE, "edge", 0.4), (Flag.STREAK, "streak", 0.4)],
)  # fmt: skip
def test_what_the_detector_saw_becomes_a_reason(tmp_path, flag, code, share):
    """A share of flagged sightings above the registry's threshold gives the reason, and only to that droplet."""
    rng = np.random.default_rng(85)

    def flags(tracks):
        values = np.zeros(len(tracks), np.int64)
        rows = tracks.rows(0)
        values[rows] = np.where(rng.random(rows.stop - rows.start) < share, int(flag), 0)
        return values

    codes = reasons(evaluate(tmp_path, rng, cluster(rng, 3), flags=flags))
    assert code in codes[0]
    assert all(code not in codes[number] for number in (1, 2))


def test_chance_detections_are_no_droplet(tmp_path):
    """Spots here and there over the whole recording are rejected; a droplet that leaves and comes back is not."""
    rng = np.random.default_rng(92)
    lives = [Life(0.7e-6, 4), Life(0.8e-6, -3), Life(0.6e-6, 2)]
    tracks, recording = made_tracks(rng, lives, CAMERA)
    frames = tracks.sightings.frame
    chance = (tracks.droplet == 0) & (rng.random(len(tracks)) < 0.05)
    visits = (tracks.droplet == 1) & ((frames < 40) | (frames > 640))
    stay = np.flatnonzero(chance | visits | (tracks.droplet == 2))
    bench = made_bench(tmp_path, CAMERA)
    found = evaluate_droplets(
        replace(tracks, droplet=tracks.droplet[stay], sightings=tracks.sightings.take(stay)),
        given(recording, bench),
    )
    assert reasons(found)[0] == {"sparse"}
    assert np.isnan(found.droplets[0].charge_c)
    assert "sparse" not in reasons(found)[1]
    assert found.droplets[0].verdict == "reject"


def test_a_jump_beside_a_neighbour_is_excused(tmp_path):
    """The same lasting jump is a hop in the open, and none where a neighbour was fitted jointly."""
    for crowded in (False, True):
        tracks, recording = made_tracks(
            np.random.default_rng(93), cluster(np.random.default_rng(94), 3), CAMERA
        )
        row = tracks.rows(0).start + 300
        y, flags = tracks.sightings.y.copy(), tracks.sightings.flags.copy()
        y[row : tracks.rows(0).stop] += 6.0
        flags[row] = int(Flag.CROWDED) if crowded else 0
        bench = made_bench(tmp_path, CAMERA)
        found = evaluate_droplets(
            replace(tracks, sightings=replace(tracks.sightings, y=y, flags=flags)), given(recording, bench)
        )
        assert ("hop" in reasons(found)[0]) is not crowded


def test_light_of_the_lamp_is_no_droplet(tmp_path):
    """Sightings inside the lamp's rectangle are not used, whatever they do."""
    tracks, recording = made_tracks(np.random.default_rng(95), cluster(np.random.default_rng(96), 3), CAMERA)
    bench = made_bench(tmp_path, CAMERA)
    rows = tracks.rows(0)
    x, y = tracks.sightings.x[rows], tracks.sightings.y[rows]
    lamp = (int(x.min()), int(y.min()), int(np.ptp(x)) + 2, int(np.ptp(y)) + 2)
    bench = replace(bench, field=replace(bench.field, lamp=lamp))
    found = evaluate_droplets(tracks, given(recording, bench))
    assert not found.used[rows].any()
    assert found.droplets[0].verdict == "reject"


def test_droplets_that_shrink_together_are_told_with_their_rate(tmp_path):
    """Each shrinks too little to show; all together give d(r^2)/dt within its uncertainty, and still ones give none."""
    rate = -1.5e-15
    lives = [replace(life, shrinking=rate / (2 * life.radius**2), radius=life.radius * float(
        np.exp(-rate / (2 * life.radius**2) * 12))) for life in cluster(np.random.default_rng(97), 16)]  # fmt: skip
    found = evaluate(tmp_path, np.random.default_rng(98), lives)
    shrink = found.details["shrinking"]
    assert shrink["radius2_rate_m2_s"] == pytest.approx(rate, abs=4 * shrink["radius2_rate_std_m2_s"])
    assert any("shrink together" in warning for warning in found.warnings)
    still = evaluate(tmp_path, np.random.default_rng(99), cluster(np.random.default_rng(97), 16))
    assert not any("together" in warning for warning in still.warnings)


def shifted_list(tmp_path, shift, count=4):
    """Evaluate droplets with the right list, its changes moved by a shift in s."""
    tracks, recording = made_tracks(
        np.random.default_rng(101), cluster(np.random.default_rng(100), count), CAMERA
    )
    bench = made_bench(tmp_path, CAMERA)
    entries = [(t + shift if t else 0.0, v) for t, v in bench.field.entries]
    return evaluate_droplets(tracks, Given(recording, field_from_list(entries, recording), bench, Settings()))


def test_a_list_that_the_droplets_contradict_is_an_error_that_shows_both(tmp_path):
    """A list 0.2 s early or 2.5 s late is refused with its times and those the droplets see; the right one is not."""
    assert not any("says; check its times" in warning for warning in shifted_list(tmp_path, 0.0).warnings)
    first = CAMERA.steps[1][0]
    for shift in (-0.2, 2.5):
        with pytest.raises(FieldError, match="contradict the list") as told:
            shifted_list(tmp_path, shift)
        assert f"at {first + shift:.2f}" in str(told.value)
        # The droplets place the change to 10 ms or so; the message has two digits.
        seen = float(re.search(r"see that at ([\d.]+)", str(told.value)).group(1))
        assert seen == pytest.approx(first, abs=0.03)


def test_a_list_that_two_droplets_see_too_early_is_told_as_a_warning(tmp_path):
    """Two droplets are not enough to refuse a list 0.2 s early; size and sense are told."""
    found = shifted_list(tmp_path, -0.2, count=2)
    assert any("0.20 s later than the list" in warning for warning in found.warnings)


def test_two_swapped_tracks_are_told_as_a_pair(tmp_path):
    """Two droplets that cross and take each other's track at 12 s both switch, and the warning names both."""
    rng = np.random.default_rng(102)
    lives = [Life(0.6e-6, 5), Life(1.0e-6, -6), Life(0.8e-6, 3)]
    tracks, recording = made_tracks(rng, lives, CAMERA)
    times = recording.frame_times[tracks.sightings.frame]
    x, y = tracks.sightings.x.copy(), tracks.sightings.y.copy()
    for number in (0, 1):  # let them meet at 12 s
        rows = np.arange(len(tracks))[tracks.rows(number)]
        at = rows[np.searchsorted(times[rows], 12.0)]
        x[rows] += 300.0 - x[at]
        y[rows] += 200.0 - y[at]
    swapped = tracks.droplet.copy()
    late = times >= 12.0
    swapped[late & (tracks.droplet == 0)], swapped[late & (tracks.droplet == 1)] = 1, 0
    order = np.lexsort((tracks.sightings.frame, swapped))
    seen = replace(tracks.sightings, x=x, y=y).take(order)
    bench = made_bench(tmp_path, CAMERA)
    found = evaluate_droplets(
        replace(tracks, droplet=swapped[order], sightings=seen), given(recording, bench)
    )
    assert [row.verdict for row in found.droplets] == ["doubt", "doubt", "keep"]
    assert all("switch" in reasons(found)[number] for number in (0, 1))
    told = [warning for warning in found.warnings if "swapped" in warning]
    assert len(told) == 1
    assert "droplets 0 and 1" in told[0]


def test_a_droplet_at_balance_is_told_with_its_voltage(tmp_path):
    """A droplet that hangs still at 200 V reports that balance voltage within its uncertainty."""
    camera = Camera(
        seconds=30.0, steps=tuple((3.0 * i, e / 6e-3) for i, e in enumerate([0, 200, 0, 200, 0] * 2))
    )
    # Fall speed of 1 um: the number that balances 200 V is -6.8; the radius is chosen so that it is -6.
    from diffusing_droplets import CONDITIONS
    from scipy.optimize import brentq

    from physics.droplet import charge_at_balance

    radius = brentq(lambda r: charge_at_balance(r, 200.0, CONDITIONS) / ELEMENTARY_CHARGE + 6, 0.5e-6, 1.5e-6)
    found = evaluate(tmp_path, np.random.default_rng(86), [Life(radius, -6), Life(0.8e-6, 3)], camera=camera)
    rests = [rest for rest in found.details["balances"] if rest["droplet"] == 0]
    assert "balance" in reasons(found)[0]
    assert len(rests) >= 2  # of four segments at 200 V, each within two deviations with probability 0.95
    assert rests[0]["voltage_v"] == pytest.approx(200.0, abs=4 * rests[0]["voltage_std_v"])
    assert rests[0]["voltage_std_v"] < 10
    assert {row.kind for row in found.changes if row.droplet == 0} == {"balance"}


def test_a_slow_droplet_is_not_at_rest_where_all_segments_tell_its_speed(tmp_path):
    """At 80 % of its balance voltage a short segment's speed may be 0 within two deviations; all together are not."""
    from diffusing_droplets import CONDITIONS

    from physics.droplet import charge_at_balance, fall_speed

    life = Life(0.55e-6, -3)
    one = abs(float(charge_at_balance(life.radius, 1.0, CONDITIONS))) / ELEMENTARY_CHARGE
    near = 0.8 * one / 3
    camera = Camera(
        seconds=60.0,
        steps=tuple((2.0 * i, e / 6e-3) for i, e in enumerate([0, near, 0, 2 * near, 0, near] * 5)),
    )
    found = evaluate(tmp_path, np.random.default_rng(87), [life, Life(0.8e-6, 3)], camera=camera)
    own = [row for row in found.segments if row.droplet == 0 and row.voltage_v == pytest.approx(near)]
    fall = float(fall_speed(life.radius, CONDITIONS))
    still = [abs(row.down_speed_m_s) < 2 * row.down_speed_std_m_s < 0.4 * fall for row in own]
    assert any(still)
    assert "balance" not in reasons(found)[0]
    assert found.details["balances"] == []


def test_a_droplet_that_drifts_sideways_against_the_others_is_doubted(tmp_path):
    """Air carries all; one that goes its own way is named, and the air is not moved by it."""
    rng = np.random.default_rng(87)
    lives = cluster(rng, 8)
    tracks, recording = made_tracks(rng, lives, CAMERA, air=(0.0, 3e-6))
    x = tracks.sightings.x.copy()
    rows = tracks.rows(0)
    x[rows] += 10e-6 / 3e-6 * recording.frame_times[tracks.sightings.frame[rows]]
    bench = made_bench(tmp_path, CAMERA)
    found = evaluate_droplets(
        replace(tracks, sightings=replace(tracks.sightings, x=x)), given(recording, bench)
    )
    codes = reasons(found)
    assert "side_drift" in codes[0]
    assert all("side_drift" not in codes[number] for number in range(1, 8))
    assert found.air_current["side_m_s"] == pytest.approx(3e-6, abs=4 * found.air_current["side_std_m_s"])


def test_the_charge_unit_of_many_droplets_is_e(tmp_path):
    """Forty droplets of 1 to 4 charges resolve the unit without assuming it; steps take part."""
    rng = np.random.default_rng(88)
    numbers = rng.choice([-3, -2, -1, 1, 2, 3], 40)
    lives = [Life(float(r), int(n)) for r, n in zip(rng.uniform(0.6e-6, 0.9e-6, 40), numbers, strict=True)]
    lives[0] = Life(0.7e-6, 1, changes=((12.0, 0.7e-6, 3),))
    unit = evaluate(tmp_path, rng, lives).charge_unit
    assert unit["resolved"]
    assert unit["over_e"] == pytest.approx(1.0, abs=4 * unit["over_e_std"])


def test_decisions_split_trim_and_judge(tmp_path):
    """A split makes two droplets, a trim leaves sightings unused, a verdict stands; the linker's numbers stay."""
    rng = np.random.default_rng(89)
    lives = cluster(rng, 3)
    tracks, recording = made_tracks(np.random.default_rng(90), lives, CAMERA)

    def place(number):
        rows = tracks.rows(number)
        chosen = np.linspace(rows.start, rows.stop - 1, 20).astype(int)
        times = recording.frame_times[tracks.sightings.frame[chosen]]
        return tuple(zip(times, tracks.sightings.x[chosen], tracks.sightings.y[chosen], strict=True))

    decisions = (
        Decision("2026-03-02T10:00:00+00:00", 0, "split", "", place(0), at=12.0),
        Decision("2026-03-02T10:01:00+00:00", 1, "trim", "", place(1), start=5.0),
        Decision("2026-03-02T10:02:00+00:00", 2, "reject", "two droplets", place(2)),
    )
    found = evaluate(tmp_path, np.random.default_rng(90), lives, decisions=decisions)
    assert [row.droplet for row in found.droplets] == [0, 1, 2, 3]
    assert found.droplets[0].last_s < 12.0 <= found.droplets[3].first_s
    assert set(found.linked[found.tracks.droplet == 3]) == {0}
    times = recording.frame_times[found.tracks.sightings.frame]
    assert not found.used[(found.tracks.droplet == 1) & (times < 5.0)].any()
    assert "trimmed" in found.droplets[1].reasons
    assert (found.droplets[2].verdict, found.droplets[2].reasons[-1]) == ("reject", "decided")


def test_an_empty_recording_is_an_empty_evaluation(tmp_path):
    """No tracks give no rows and no error."""
    tracks, recording = made_tracks(np.random.default_rng(91), [Life(0.7e-6, 3)], CAMERA)
    none = replace(tracks, droplet=tracks.droplet[:0], sightings=tracks.sightings.take(np.arange(0)))
    bench = made_bench(tmp_path, CAMERA)
    found = evaluate_droplets(none, given(recording, bench))
    assert (found.droplets, found.segments, found.changes) == ((), (), ())
    assert found.charge_unit["resolved"] is False
