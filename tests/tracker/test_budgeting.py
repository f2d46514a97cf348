"""Budgets of a charge, checked by Monte Carlo."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from bench_files import write_bench

from physics.air import moist_air
from physics.budget import DropletModel, droplet_budget, shared_sensitivities
from physics.droplet import ELEMENTARY_CHARGE
from tracker.bench import load_bench
from tracker.budgeting import _checked


@pytest.mark.parametrize("viscosity", [None, "18.60(4) uPa s"])
def test_a_right_budget_passes_its_check_whether_the_viscosity_is_stated_or_not(tmp_path, viscosity):
    """With a stated viscosity the air's temperature moves the charge less; draws and budget must both know it.

    The temperature is made uncertain by 2 K, which a check with the viscosity of the model would count twice.
    """
    changes = [('"22.0(3) degC"', '"22(2) degC"')]
    if viscosity:
        changes.append(("[air]", f'[air]\nviscosity = "{viscosity}"'))
    bench = load_bench(write_bench(tmp_path, *changes))
    air = moist_air(bench.temperature.value, bench.pressure.value, relative_humidity=bench.relative_humidity.value,
                    viscosity=bench.viscosity.value if viscosity else None)  # fmt: skip
    charge, own = 5 * ELEMENTARY_CHARGE, 0.06 * ELEMENTARY_CHARGE
    slopes = shared_sensitivities(DropletModel(7e-7, charge, bench.conditions, air))[1]
    row = SimpleNamespace(radius_m=7e-7, charge_c=charge, charge_own_std_c=own, radius_std_m=1e-9)
    linear = droplet_budget(charge, own, slopes, bench.shared_inputs)
    checked = _checked(linear, row, np.asarray(slopes), bench, own_radius=1e-9 / 7e-7)
    assert checked.std == pytest.approx(linear.std, rel=0.03)
    assert checked.method == "linear", checked.note
