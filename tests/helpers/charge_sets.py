"""Sets of charges with known numbers, for the tests and the study of charge numbers and the charge unit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from physics.quanta import (
    ELEMENTARY_CHARGE,
    ChargeUnit,
    charge_sample,
    charge_unit,
    number_probabilities,
    pooled_charge_unit,
)

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Setting:
    """How a set of charges is made; standard deviations in units of e."""

    droplets: int
    std: float | tuple[float, float]  # one for all, or drawn evenly between two
    largest: int = 20
    outliers: float = 0.0  # share of charges on no tooth
    smooth: bool = False  # no comb at all
    stated: float = 1.0  # stated over true standard deviation
    rel_std: float = 0.0  # of the radius part, which grows with the true number

    def draw(self, rng: np.random.Generator) -> tuple[Floats, Floats]:
        """Give charges and stated standard deviations in C."""
        number = rng.integers(1, self.largest + 1, self.droplets).astype(float)
        std = (
            np.broadcast_to(self.std, self.droplets)
            if np.isscalar(self.std)
            else rng.uniform(*self.std, self.droplets)
        )
        off = rng.random(self.droplets) < (1.0 if self.smooth else self.outliers)
        number[off] = rng.uniform(0.5, self.largest, off.sum())
        true_std = np.hypot(std, self.rel_std * number)
        charge = number + true_std * rng.standard_normal(self.droplets)
        stated = self.stated * np.hypot(std, self.rel_std * charge)
        return charge * ELEMENTARY_CHARGE, stated * ELEMENTARY_CHARGE


@dataclass(frozen=True)
class UnitCounts:
    """What the charge unit of many sets came to."""

    sets: int
    best_right: float  # share whose best comb is within 5 % of e
    resolved: float  # share
    wrong: int  # resolved, and more than 5 % off
    cover_68: float  # share of right resolved sets
    cover_95: float
    error_95: float  # 95 % quantile of |unit / e - 1| of them
    bias: float  # mean error over own standard uncertainty
    needed: float  # median of the droplets that unresolved sets are told to need


def count_units(
    setting: Setting, sets: int, rng: np.random.Generator, *, per_tooth: bool = False
) -> UnitCounts:
    """Find the unit of many sets."""
    found: list[ChargeUnit] = []
    for _ in range(sets):
        charge, std = setting.draw(rng)
        rel = np.full(len(charge), setting.stated * setting.rel_std) if per_tooth else None
        found.append(charge_unit(charge, std, rel_stds=rel))
    e = ELEMENTARY_CHARGE
    good = [u for u in found if u.resolved and abs(u.unit / e - 1) < 0.05]
    error = np.array([u.unit / e - 1 for u in good])
    needs = [u.advice.droplets or 10**6 for u in found if u.advice is not None]
    return UnitCounts(
        sets, float(np.mean([abs(u.best / e - 1) < 0.05 for u in found])), float(np.mean([u.resolved for u in found])),
        sum(u.resolved for u in found) - len(good),
        float(np.mean([u.interval_68[0] < e < u.interval_68[1] for u in good])) if good else np.nan,
        float(np.mean([u.interval_95[0] < e < u.interval_95[1] for u in good])) if good else np.nan,
        float(np.quantile(np.abs(error), 0.95)) if good else np.nan,
        float(np.mean([(u.unit - e) / u.unit_own_std for u in good])) if good else np.nan,
        float(np.median(needs)) if needs else np.nan,
    )  # fmt: skip


@dataclass(frozen=True)
class NumberCounts:
    """What the charge numbers of many droplets came to."""

    droplets: int
    right: float  # share whose most probable number is the true one
    mean_probability: float  # mean of the probability of the most probable number
    claimed: float  # share with a probability above 0.95
    wrong_of_claimed: float


def count_numbers(
    setting: Setting, sets: int, rng: np.random.Generator, *, shared: float, treatment: str = "joint"
) -> NumberCounts:
    """Find the numbers of many sets, each with one common factor; `treatment` joint, apart or ignored."""
    right, probability = [], []
    for _ in range(sets):
        number = rng.integers(1, setting.largest + 1, setting.droplets) * rng.choice(
            [-1, 1], setting.droplets
        )
        std = np.broadcast_to(setting.std, setting.droplets) if np.isscalar(setting.std) else rng.uniform(
            *setting.std, setting.droplets)  # fmt: skip
        factor = 1 + shared * rng.standard_normal()
        charge = factor * number + std * rng.standard_normal(setting.droplets)
        stated = np.hypot(std, shared * charge) if treatment == "apart" else std
        found = number_probabilities(charge * ELEMENTARY_CHARGE, stated * ELEMENTARY_CHARGE,
                                     shared_rel_std=shared if treatment == "joint" else 0.0)  # fmt: skip
        right.append(found.number == number)
        probability.append(found.probability)
    hit, chance = np.concatenate(right), np.concatenate(probability)
    sure = chance > 0.95
    return NumberCounts(len(hit), float(hit.mean()), float(chance.mean()), float(sure.mean()),
                        float(np.mean(~hit[sure])) if sure.any() else np.nan)  # fmt: skip


def changed_droplets(
    rng: np.random.Generator, droplets: int, *, std: float, rel_std: float
) -> tuple[Floats, Floats]:
    """Give droplets that changed by 1 to 3 e: two charges of each and their covariance, in C; radius error shared."""
    first = rng.integers(4, 16, droplets)
    second = first + rng.choice([-3, -2, -1, 1, 2, 3], droplets)
    radius = 1 + rel_std * rng.standard_normal(droplets)
    pair = np.stack([first, second], axis=1) * radius[:, None] + std * rng.standard_normal((droplets, 2))
    cov = rel_std**2 * pair[:, :, None] * pair[:, None, :] + std**2 * np.eye(2)
    return pair * ELEMENTARY_CHARGE, cov * ELEMENTARY_CHARGE**2


def units_of_changed(pair: Floats, cov: Floats, rel_std: float) -> dict[str, ChargeUnit]:
    """Charge unit of droplets that changed, by three treatments."""
    std = np.sqrt(np.einsum("mii->mi", cov))
    step_std = np.sqrt(cov[:, 0, 0] + cov[:, 1, 1] - 2 * cov[:, 0, 1])
    rel = np.full(len(pair), rel_std)
    return {
        "pairs": pooled_charge_unit((charge_sample([], [], pairs=(pair, cov)),)),
        "charge and step": charge_unit(
            pair[:, 0], std[:, 0], rel_stds=rel, steps=(pair[:, 1] - pair[:, 0], step_std)
        ),
        "two charges": charge_unit(pair.ravel(), std.ravel(), rel_stds=np.repeat(rel, 2)),
    }
