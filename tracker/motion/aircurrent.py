"""The air that carries all droplets of a recording: its steady speed, and how it changes slowly."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from scipy.special import chdtrc

from physics.air_current import HALF_WIDTH
from physics.droplet import Conditions, diffusion, radius_from_fall_speed
from physics.errors import PhysicsError
from physics.motion import MIN_INCREMENTS, FreeFit, Increments, air_current, whitened
from tracker.motion.velocity import Path
from tracker.records import FloatArray

LEAST_PRIOR = 1e-8  # m/s; slower air moves no droplet by more than it diffuses in minutes
KNOTS_APART = 3.0  # s between the knots of a changing current: convection in a cell takes longer to turn
LEAST_DROPLETS = 4  # with fewer, what they share cannot be told from what each does
CHANGING = 1e-3  # false alarms per recording of a changing current
RIDGE = 1e-4  # m/s, prior width of the change of the current
LOOKS = 3  # at which droplets take part
SOUND = (
    4.0  # standard deviations by which Brownian motion may miss the fall speed in a droplet that takes part
)


@dataclass(frozen=True, slots=True)
class Drift:
    """Change of the air's speed about its mean over the recording: straight lines between knots."""

    times: FloatArray = field(default_factory=lambda: np.empty(0))  # (K,) s
    down: FloatArray = field(default_factory=lambda: np.empty(0))  # (K,) m/s
    side: FloatArray = field(default_factory=lambda: np.empty(0))  # (K,) m/s
    covariance: FloatArray = field(default_factory=lambda: np.empty((0, 0)))  # (m/s)^2 of `down`

    def taken_out(self, steps: Increments, times: FloatArray) -> Increments:
        """Give the steps as in air that keeps its mean speed; `times` are those of the sightings."""
        if not len(self.times):
            return steps
        hats = _hats(steps, times, self.times)
        return replace(steps, down=steps.down - hats @ self.down, side=steps.side - hats @ self.side)

    def std_of_mean(self, steps: Increments, times: FloatArray) -> float:
        """Standard uncertainty in m/s of the drift's mean over the time of one droplet."""
        if not len(self.times):
            return 0.0
        share = _hats(steps, times, self.times).sum(axis=0) / np.sum(steps.dt)
        return float(np.sqrt(max(share @ self.covariance @ share, 0.0)))


@dataclass(frozen=True, slots=True)
class AirCurrent:
    """Speed of the air along and across gravity, common to all droplets of a recording."""

    down: float  # m/s
    down_std: float  # m/s
    side: float  # m/s
    side_std: float  # m/s
    droplets: int  # that it rests on
    drift: Drift = field(default_factory=Drift)

    def plain(self) -> dict[str, object]:
        """Give plain values for provenance."""
        return {
            "down_m_s": self.down, "down_std_m_s": self.down_std, "side_m_s": self.side,
            "side_std_m_s": self.side_std, "droplets": self.droplets, "changing": bool(len(self.drift.times)),
            "drift": {"time_s": self.drift.times.tolist(), "down_m_s": self.drift.down.tolist(),
                      "side_m_s": self.drift.side.tolist()},
        }  # fmt: skip


def find_air_current(fits: Sequence[FreeFit], conditions: Conditions) -> AirCurrent:
    """Find the air's steady speed from what all droplets share.

    Parameters
    ----------
    fits : sequence of FreeFit
        One of each droplet, which falls.
    conditions : Conditions
        Of the bench.

    Returns
    -------
    current : AirCurrent
        Across gravity the weighted mean of the droplets' side speeds. Along gravity the air adds to every fall
        speed; only Brownian motion tells the two apart, and weakly, so the side speed serves as the prior's
        width: air in a cell moves about as fast along as across. It is one sample of that width, so the prior is
        Cauchy: air that happens to stand still across may well move along. Droplets whose Brownian motion
        contradicts their fall speed take no part, first for any air that the prior allows, then for that found.
    """
    if not fits:
        return AirCurrent(0.0, 0.0, 0.0, 0.0, 0)
    speeds = np.array([fit.side_speed for fit in fits])
    stds = np.array([fit.side_speed_std for fit in fits])
    side, side_std = robust_mean(speeds, stds)
    prior = max(float(np.hypot(side, side_std)), LEAST_PRIOR)
    wide = (0.0, 2 * HALF_WIDTH * prior)
    # a droplet's own std of ln D is large when its D came out low, and would excuse it
    spread = float(np.sqrt(np.median([fit.dof * fit.log_diffusion_std**2 for fit in fits])))
    sound = [fit for fit in fits if _is_sound(fit, wide, conditions, spread)]
    for _ in range(LOOKS):
        found = air_current(sound, conditions, prior_std=prior, tails="cauchy")
        last, sound = sound, [fit for fit in fits if _is_sound(fit, found, conditions, spread)]
        if len(last) == len(sound) and all(a is b for a, b in zip(last, sound, strict=True)):
            break
    return AirCurrent(*found, side, side_std, len(last))


def _is_sound(fit: FreeFit, air: tuple[float, float], conditions: Conditions, spread: float) -> bool:
    """Whether Brownian motion and fall speed can belong to one sphere of the oil in air of a speed known to a std.

    `spread` is the standard deviation of ln D times the root of the degrees of freedom, typical of all droplets.
    """
    log_diffusion_std = min(fit.log_diffusion_std, spread / np.sqrt(max(fit.dof, 1)))
    try:
        law = float(diffusion(radius_from_fall_speed(fit.fall_speed - air[0], conditions), conditions))
    except PhysicsError:
        return False
    # d ln D / d ln v is 0.5 to 0.6
    vague = 0.6 * float(np.hypot(fit.fall_speed_std, air[1])) / (fit.fall_speed - air[0])
    return bool(abs(np.log(fit.diffusion / law)) < SOUND * float(np.hypot(log_diffusion_std, vague)))


def robust_mean(values: FloatArray, stds: FloatArray) -> tuple[float, float]:
    """Weighted mean that single strange values do not move.

    Parameters
    ----------
    values, stds : ndarray of shape (N,)
        N >= 1; stds above 0.

    Returns
    -------
    mean, std : float
        Of the values within 3.29 of their standard deviations of the mean, found by iteration from the median.
    """
    mean, std = float(np.median(values)), float(np.median(stds))
    for _ in range(10):
        near = np.abs(values - mean) <= 3.29 * np.hypot(stds, std)
        if not np.any(near):
            near = np.ones(len(values), bool)
        weight = near / stds**2
        new = float(weight @ values / weight.sum())
        std = float(1 / np.sqrt(weight.sum()))
        if new == mean:
            break
        mean = new
    return mean, std


def find_drift(paths: Sequence[Path], fits: Sequence[FreeFit]) -> Drift:
    """Find how the air's speed changes over a recording, if it does.

    Parameters
    ----------
    paths : sequence of Path
        Of all droplets.
    fits : sequence of FreeFit
        Of the same paths.

    Returns
    -------
    drift : Drift
        Without knots if the droplets share no change of speed, which is tested at 1 in 1000 across gravity,
        where no charge acts, and along it with the quarter of the droplets that change most left out.

    Notes
    -----
    Generalised least squares: every droplet keeps its own fall speed, drive and side speed, and all share one
    speed of the air that runs in straight lines between knots about 3 s apart. Its mean over the recording
    cannot be told from the fall speeds and is 0 here.
    """
    usable = [(path, fit) for path, fit in zip(paths, fits, strict=True) if len(path) > 2 * MIN_INCREMENTS]
    if len(usable) < LEAST_DROPLETS:
        return Drift()
    begin, end = min(path.times[0] for path, _ in usable), max(path.times[-1] for path, _ in usable)
    count = int((end - begin) / KNOTS_APART) + 1
    if count < 3:
        return Drift()
    knots = np.linspace(begin, end, count)
    terms = [_terms(path, fit, knots) for path, fit in usable]
    side = _Shared.of([term[1] for term in terms])
    own = np.array([term[0].chi_square() for term in terms])
    calm = np.argsort(own)[: max(LEAST_DROPLETS, int(0.75 * len(own)))]
    down = _Shared.of([terms[i][0] for i in calm])
    if not (side.significant() or down.significant()):
        return Drift()
    return Drift(knots, down.solution(), side.solution(), down.covariance())


@dataclass(frozen=True, slots=True)
class _Shared:
    """Normal equations of a speed at knots, what each droplet does by itself projected out."""

    matrix: FloatArray  # (K, K)
    right: FloatArray  # (K,)

    @classmethod
    def of(cls, terms: Sequence[_Shared]) -> _Shared:
        """Add the equations of several droplets."""
        return cls(np.sum([t.matrix for t in terms], axis=0), np.sum([t.right for t in terms], axis=0))

    def covariance(self) -> FloatArray:
        """Covariance of the speeds at the knots, their mean taken out."""
        inverse = np.linalg.inv(self.matrix + np.eye(len(self.right)) / RIDGE**2)
        centre = np.eye(len(self.right)) - 1 / len(self.right)
        return np.asarray(centre @ inverse @ centre)

    def solution(self) -> FloatArray:
        """Speeds at the knots, their mean taken out."""
        found = np.linalg.solve(self.matrix + np.eye(len(self.right)) / RIDGE**2, self.right)
        return np.asarray(found - found.mean())

    def chi_square(self) -> float:
        """Chi-square that the shared speed explains."""
        return float(self.right @ np.linalg.pinv(self.matrix, rcond=1e-8, hermitian=True) @ self.right)

    def significant(self) -> bool:
        """Whether chance explains it in fewer than one recording in a thousand."""
        rank = int(
            np.linalg.matrix_rank(self.matrix, tol=1e-8 * np.linalg.norm(self.matrix, 2), hermitian=True)
        )
        return rank > 0 and bool(chdtrc(rank, self.chi_square()) < CHANGING)


def _terms(path: Path, fit: FreeFit, knots: FloatArray) -> tuple[_Shared, _Shared]:
    """Give one droplet's equations along and across gravity."""
    steps = path.steps
    rho = float(np.exp(fit.log_rho))
    hats = _hats(steps, np.asarray(path.times), knots)
    own = np.column_stack([steps.dt, steps.impulse]) if np.any(steps.impulse) else steps.dt[:, None]
    down = whitened(steps, diffusion=fit.diffusion, rho=rho, columns=np.column_stack([own, hats]))
    across = np.column_stack([steps.dt, hats])
    side = whitened(steps, diffusion=fit.diffusion, rho=rho, columns=across, axis="side")
    return _projected(down.columns, down.data, own.shape[1]), _projected(side.columns, side.data, 1)


def _projected(columns: FloatArray, data: FloatArray, own: int) -> _Shared:
    """Project the first columns out of the others and the data."""
    basis, _ = np.linalg.qr(columns[:, :own])
    rest = columns[:, own:] - basis @ (basis.T @ columns[:, own:])
    return _Shared(rest.T @ rest, rest.T @ data)


def _hats(steps: Increments, times: FloatArray, knots: FloatArray) -> FloatArray:
    """Displacement of each step by unit speed at each knot, straight lines between (steps, K)."""
    middle = times[steps.first] + 0.5 * (steps.dt + steps.exposure)
    place = np.clip((middle - knots[0]) / (knots[1] - knots[0]), 0, len(knots) - 1)
    left = np.minimum(place.astype(np.int64), len(knots) - 2)
    share = place - left
    hats = np.zeros((len(middle), len(knots)))
    rows = np.arange(len(middle))
    hats[rows, left] = (1 - share) * steps.dt
    hats[rows, left + 1] = share * steps.dt
    return hats
