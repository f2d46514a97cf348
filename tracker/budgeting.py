"""Uncertainty budgets of a result: a table for each droplet and one for the bench, checked by Monte Carlo if asked."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from physics.air import moist_air
from physics.budget import (
    SHARED_INPUTS,
    Budget,
    DropletModel,
    bench_budget,
    checked_budget,
    droplet_budget,
    shared_sensitivities,
)
from tracker.bench import Bench
from tracker.errors import ResultError
from tracker.evaluate import present_bench
from tracker.keeping.store import Result, read_result
from tracker.keeping.tables import BUDGET, table
from tracker.provenance import recording_from_json
from tracker.term.poolcharges import own_radius_stds

if TYPE_CHECKING:
    import pandas as pd


def budgets(
    folder: Path | str, *, droplet: int | None = None, check: bool = False
) -> dict[int | None, Budget]:
    """Give the budgets of a result's charges.

    Parameters
    ----------
    folder : Path or str
        Result folder.
    droplet : int, optional
        Only this one; otherwise all with a charge, and the bench.
    check : bool, optional
        True checks each droplet's linear budget by Monte Carlo (JCGM 101), which takes a second or so each, and
        gives its result where the two disagree.

    Returns
    -------
    budgets : dict
        Droplet number to budget; None stands for the factor that the bench puts on all charges alike.

    Raises
    ------
    ResultError
        If there is no such droplet, or it has no charge.
    """
    result = read_result(folder)
    recording = recording_from_json(result.recording, Path(folder) / result.recording["path"])
    bench = present_bench(result, recording).fitted_to(recording.width, recording.height)
    stored = {int(n): np.array(s) for n, s in result.recording["budget"]["log_charge_sensitivities"].items()}
    radii = own_radius_stds(result.recording)
    rows = result.droplets.set_index("droplet")
    if droplet is not None and droplet not in rows.index:
        raise ResultError(str(folder), f"there is no droplet {droplet}")
    if droplet is not None and droplet not in stored:
        raise ResultError(str(folder), f"droplet {droplet} has no charge, and so no budget")
    wanted = sorted(stored) if droplet is None else [droplet]
    made: dict[int | None, Budget] = {}
    for number in wanted:
        row = rows.loc[number]
        budget = droplet_budget(row.charge_c, row.charge_own_std_c, stored[number], bench.shared_inputs)
        if check:
            own = radii.get(number, row.radius_std_m / row.radius_m)
            budget = _checked(budget, row, stored[number], bench, own_radius=own)
        made[number] = budget
    if droplet is None and stored:
        made[None] = _bench_budget(result, stored, bench)
    return made


def _bench_budget(result: Result, stored: dict[int, np.ndarray], bench: Bench) -> Budget:
    """Budget of the common factor; droplets count by how well their charge is known."""
    rows = result.droplets.set_index("droplet").loc[sorted(stored)]
    weights = (rows["charge_c"] / rows["charge_own_std_c"]).to_numpy(float) ** 2
    return bench_budget(np.array([stored[n] for n in sorted(stored)]), bench.shared_inputs, weights=weights)


def _checked(
    budget: Budget, row: pd.Series, sensitivities: np.ndarray, bench: Bench, *, own_radius: float
) -> Budget:
    """Check by Monte Carlo, with the weight of Brownian motion that the stored sensitivity to the scale shows."""
    stated = bench.viscosity.value if "air.viscosity" in bench.viscosity.origin else None
    air = moist_air(
        bench.temperature.value, bench.pressure.value, relative_humidity=bench.relative_humidity.value,
        viscosity=stated,
    )  # fmt: skip

    def model(weight: float) -> DropletModel:
        return DropletModel(
            row.radius_m, row.charge_c, bench.conditions, air, diffusion_weight=weight,
            expansion=bench.oil_expansion,
        )  # fmt: skip

    scale = SHARED_INPUTS.index("scale")
    by_speed, by_motion = (shared_sensitivities(model(w))[1][scale] for w in (0.0, 1.0))
    weight = float(np.clip((sensitivities[scale] - by_speed) / (by_motion - by_speed), 0.0, 1.0))
    own = np.diag([own_radius**2, row.charge_own_std_c**2])
    return checked_budget(budget, model(weight), own, bench.shared_inputs, np.random.default_rng(0))


def budget_table(made: dict[int | None, Budget]) -> pd.DataFrame:
    """Turn budgets into one table.

    Parameters
    ----------
    made : dict
        As `budgets` gives them.

    Returns
    -------
    table : DataFrame
        Columns of `tracker.keeping.tables.BUDGET`; the bench's rows have no droplet number.
    """
    return table((_Line(number, row) for number, budget in made.items() for row in budget.rows), BUDGET)


class _Line:
    """One row of a budget under the names of the table's columns."""

    def __init__(self, droplet: int | None, row: object) -> None:
        self.droplet = droplet
        for name in ("input", "value", "unit", "std", "sensitivity", "share"):
            setattr(self, name, getattr(row, name))
