"""Full Monte Carlo study of velocity, diffusion, radius, charge and charge number of single droplets.

Writes `estimation.md` beside this file: what was asked, in which setting, what is demanded, what was measured.
Run as ``python tests/benchmarks/study_estimation.py [--tracks 1000] [--workers 2]``; ten minutes at most on two cores.
Setting unless said otherwise: oil 886 kg/m^3, 22 degC, pixel 2.5 um, 30 frames/s, exposure 0.9 of the interval, 5 % of
the frames missing, field off/+/off/- in segments of 3 s, 4e4 V/m.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np
from scipy.special import logsumexp

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE.parent / "helpers"), str(HERE.parents[1])]

from diffusing_droplets import CONDITIONS, PIXEL, Plan, record  # noqa: E402

from physics.droplet import ELEMENTARY_CHARGE, diffusion, droplet_mobility, fall_speed  # noqa: E402
from physics.motion import air_current, droplet_posterior, free_fit, whitened  # noqa: E402

Row = tuple[str, str, str, str, bool]  # what, setting, demand, measured, met

SPEED_CASES = [(r, px) for r in (3e-7, 5e-7, 8e-7, 1.5e-6) for px in (0.03, 0.1, 0.3)]
NUMBER_CASES = [
    (3e-7, 24.0, 0.71), (4e-7, 24.0, 0.80), (5e-7, 24.0, 0.92), (7e-7, 24.0, 0.985), (1e-6, 24.0, 0.995),
    (3e-7, 60.0, 0.0), (4e-7, 60.0, 0.0), (5e-7, 60.0, 0.0),
]  # fmt: skip


def um(radius: float) -> str:
    """Radius for a table."""
    return f"r {1e6 * radius:.1f} um"


def speeds(radius: float, noise_px: float, tracks: int, seed: int) -> list[Row]:
    """Variance of fall speed and drive over the Cramer-Rao bound, and coverage of their intervals."""
    rng = np.random.default_rng(seed)
    plan = Plan(seconds=12.0 if radius < 4e-7 else 24.0, noise_px=noise_px)
    true_d = float(diffusion(radius, CONDITIONS))
    per_volt = float(droplet_mobility(radius, CONDITIONS)) * 5 * ELEMENTARY_CHARGE / CONDITIONS.plate_gap
    truth = np.array([float(fall_speed(radius, CONDITIONS)), per_volt])
    against_bound, pull = [], []
    for _ in range(tracks):
        steps = record(rng, radius, 5, plan=plan).steps()
        fit = free_fit(steps)
        off = np.array([fit.fall_speed, fit.drive_per_volt[0]]) - truth
        rho = (noise_px * PIXEL) ** 2 / true_d
        white = whitened(
            steps, diffusion=true_d, rho=rho, columns=np.column_stack([steps.dt, steps.impulse])
        ).columns
        against_bound.append(off**2 / np.diag(np.linalg.inv(white.T @ white)))
        pull.append(np.abs(off) / np.sqrt(np.diag(fit.covariance)))
    ratio, inside = np.mean(against_bound, axis=0), np.mean(np.array(pull) < 1, axis=0)
    wide = np.mean(np.array(pull) < 1.96, axis=0)
    noise = 2.5 * np.sqrt(2 / tracks)
    setting = f"{um(radius)}, {plan.seconds:.0f} s, noise {noise_px} px"
    return [
        ("speed variance / bound (fall, drive)", setting, "<= 1.05", f"{ratio[0]:.3f}, {ratio[1]:.3f}",
         bool(np.all(ratio < 1.05 + noise))),
        ("speed coverage 68 % (fall, drive)", setting, ".65-.71", f"{inside[0]:.3f}, {inside[1]:.3f}",
         bool(np.all(np.abs(inside - 0.68) < 0.03 + 2.5 * np.sqrt(0.22 / tracks)))),
        ("speed coverage 95 % (fall, drive)", setting, ".935-.965", f"{wide[0]:.3f}, {wide[1]:.3f}",
         bool(np.all(np.abs(wide - 0.95) < 0.015 + 2.5 * np.sqrt(0.0475 / tracks)))),
    ]  # fmt: skip


def free_diffusion(radius: float, plan: Plan, most: float, tracks: int, seed: int) -> list[Row]:
    """Spread and bias of ln D of the free fit."""
    rng = np.random.default_rng(seed)
    fits = [free_fit(record(rng, radius, 5, plan=plan).steps()) for _ in range(tracks)]
    off = np.log([fit.diffusion / float(diffusion(radius, CONDITIONS)) for fit in fits])
    stated = np.sqrt(np.mean([fit.log_diffusion_std**2 for fit in fits]))
    setting = f"{um(radius)}, {plan.frame_rate:.0f} fps, 24 s, noise {plan.noise_px} px"
    spread, bias = np.std(off), np.mean(off)
    return [
        ("free D: sd ln D (stated)", setting, f"<= {most}", f"{spread:.4f} ({stated:.4f})",
         bool(spread < most * (1 + 2.5 / np.sqrt(2 * tracks)))),
        ("free D: bias of ln D", setting, "abs <= .01", f"{bias:+.4f}",
         bool(abs(bias) < 0.01 + 2.5 * spread / np.sqrt(tracks))),
    ]  # fmt: skip


def radius_error(radius: float, most: float, tracks: int, seed: int) -> list[Row]:
    """Error, bias and coverage of ln r; at 0.3 um also the gain of Brownian motion."""
    rng = np.random.default_rng(seed)
    results = []
    for _ in range(tracks):
        plan = Plan(noise_px=float(rng.uniform(0.05, 0.3)))
        results.append(
            droplet_posterior(record(rng, radius, int(rng.integers(1, 16)), plan=plan).steps(), CONDITIONS)
        )
    off = np.log([result.radius / radius for result in results])
    rms = float(np.sqrt(np.mean(off**2)))
    bias = np.mean(off / np.array([result.log_radius_std for result in results]))
    cover = [
        np.mean([low < radius < high for low, high in (getattr(result, name) for result in results)])
        for name in ("radius_interval_68", "radius_interval_95")
    ]
    slack = 2.5 / np.sqrt(2 * tracks)
    setting = f"{um(radius)}, 24 s, noise .05-.3 px, n 1-15"
    rows: list[Row] = [
        ("ln r: rms", setting, f"<= {100 * most:.2f} %", f"{100 * rms:.2f} %", rms < most * (1 + slack)),
        ("ln r: bias in sd", setting, "abs <= .2", f"{bias:+.2f}", bool(abs(bias) < 0.2 + 2.5 / np.sqrt(tracks))),
        ("ln r: coverage 68 / 95 %", setting, ".65-.72 / .93-.965", f"{cover[0]:.3f} / {cover[1]:.3f}",
         bool(0.65 - 0.037 < cover[0] < 0.72 + 0.037 and 0.93 - 0.017 < cover[1] < 0.965 + 0.017)),
    ]  # fmt: skip
    if radius < 4e-7:
        fits = [result.free for result in results if result.free is not None]
        true_d, speed = float(diffusion(radius, CONDITIONS)), float(fall_speed(radius, CONDITIONS))
        slope = np.log(float(fall_speed(1.01 * radius, CONDITIONS)) / speed) / np.log(1.01)
        std = np.sqrt(np.mean([fit.fall_speed_std**2 * true_d / fit.diffusion for fit in fits]))
        alone = std / speed / slope
        gain = rms / alone
        rows.append(
            (
                "ln r: rms over that of the fall speed alone",
                setting,
                "<= .55",
                f"{gain:.2f}",
                bool(gain < 0.55 * (1 + slack)),
            )
        )
    return rows


def charge_error(radius: float, most: float, tracks: int, seed: int) -> list[Row]:
    """Error of q / e at n = 5, and coverage of its intervals."""
    rng = np.random.default_rng(seed)
    results = [droplet_posterior(record(rng, radius, 5).steps(), CONDITIONS) for _ in range(tracks)]
    off = np.array([result.charge[0] / ELEMENTARY_CHARGE - 5 for result in results])
    pull = np.abs(off) / np.array([result.charge_std[0] / ELEMENTARY_CHARGE for result in results])
    rms = float(np.sqrt(np.mean(off**2)))
    setting = f"{um(radius)}, n 5, 24 s, noise .1 px"
    share = f"{np.mean(pull < 1):.3f} / {np.mean(pull < 1.96):.3f}"
    fine = abs(np.mean(pull < 1) - 0.683) < 0.03 + 2.5 * np.sqrt(0.22 / tracks)
    return [
        ("q/e: rms", setting, f"<= {most}", f"{rms:.3f}", rms < most * (1 + 2.5 / np.sqrt(2 * tracks))),
        ("q/e: within 1 / 1.96 stated sd", setting, ".65-.72 / .93-.965", share, bool(fine)),
    ]


def numbers(radius: float, seconds: float, least: float, tracks: int, seed: int) -> list[Row]:
    """Calibration and hit rate of the charge number, false alarms of the diffusion ratio."""
    rng = np.random.default_rng(seed)
    top, right, z = [], [], []
    for _ in range(tracks):
        number = int(rng.integers(1, 16))
        plan = Plan(seconds=seconds, noise_px=float(rng.uniform(0.05, 0.3)))
        result = droplet_posterior(record(rng, radius, number, plan=plan).steps(), CONDITIONS)
        chance = np.exp(result.number_log_likelihood - logsumexp(result.number_log_likelihood))
        top.append(chance.max())
        right.append(result.number_values[np.argmax(chance)] == number)
        z.append(result.diffusion_z)
    chosen, correct = np.array(top), np.array(right)
    sure = chosen > 0.95
    wrong = np.mean(~correct[sure]) if sure.any() else 0.0
    setting = f"{um(radius)}, n 1-15, {seconds:.0f} s"
    slack = 2.5 * np.sqrt(np.mean(chosen * (1 - chosen)) / tracks)
    rows: list[Row] = [
        ("P(n): mean max P, fraction right", setting, "differ <= .02", f"{chosen.mean():.3f}, {correct.mean():.3f}",
         bool(abs(chosen.mean() - correct.mean()) < 0.02 + slack)),
        ("P(n): wrong among P > .95", setting, "<= 1.5 %", f"{100 * wrong:.2f} % of {sure.sum()}",
         bool(wrong < 0.015 + 2.5 * np.sqrt(0.015 / max(1, sure.sum())))),
    ]  # fmt: skip
    if least:
        rows.append(
            (
                "P(n): hit rate",
                setting,
                f">= {least}",
                f"{correct.mean():.3f}",
                bool(correct.mean() > least - slack),
            )
        )
    seen = np.array(z)[np.isfinite(z)]
    if len(seen) > tracks // 2:
        alarms = int(np.sum(np.abs(seen) > 3.29))
        most = 2e-3 * len(seen) + 2.5 * np.sqrt(2e-3 * len(seen))
        text = f"{np.std(seen):.2f}; {alarms} of {len(seen)}"
        rows.append(("variance ratio: sd of z; abs z > 3.29", setting, "<= 2e-3", text, alarms <= most))
    return rows


def ratio_power(radius: float, tracks: int, seed: int) -> list[Row]:
    """Power of the variance ratio when D is 1.5 times that of the weight."""
    rng = np.random.default_rng(seed)
    plan = Plan(diffusion_factor=1.5)
    z = [
        droplet_posterior(record(rng, radius, 5, plan=plan).steps(), CONDITIONS).diffusion_z
        for _ in range(tracks)
    ]
    power = np.mean(np.array(z) > 3.29)
    slack = 2.5 * np.sqrt(0.03 / tracks)
    return [
        (
            "variance ratio: power for D x 1.5",
            f"{um(radius)}, 24 s",
            ">= .97",
            f"{power:.3f}",
            bool(power > 0.97 - slack),
        )
    ]


def air(tracks: int, seed: int) -> list[Row]:
    """Air speed from 30 droplets."""
    rng = np.random.default_rng(seed)
    runs = []
    for _ in range(max(10, tracks // 10)):
        plans = [Plan(air_speed=2e-6, noise_px=float(rng.uniform(0.05, 0.3))) for _ in range(30)]
        droplets = [
            record(rng, rng.uniform(3e-7, 7e-7), int(rng.integers(1, 10)), plan=plan).steps()
            for plan in plans
        ]
        runs.append(air_current(droplets, CONDITIONS, prior_std=3e-5))
    off, std = np.array(runs)[:, 0] - 2e-6, np.array(runs)[:, 1]
    bias = np.mean(off / std)
    text = f"{1e6 * np.sqrt(np.mean(off**2)):.2f} um/s ({1e6 * np.mean(std):.2f}), bias {bias:+.2f} sd"
    met = np.sqrt(np.mean(off**2)) < 0.8e-6 * (1 + 2.5 / np.sqrt(2 * len(runs)))
    return [
        (
            "air current: rms (stated)",
            f"30 droplets, r .3-.7 um, 24 s, {len(runs)} runs",
            "<= .8 um/s",
            text,
            bool(met),
        )
    ]


def duration() -> list[Row]:
    """CPU time of one droplet of 720 frames."""
    rng = np.random.default_rng(1)
    plan = Plan(missing=0.0, noise_spread=0.2)
    steps = [record(rng, 5e-7, 5, plan=plan).steps() for _ in range(60)]
    spent = []
    for each in steps:
        start = time.process_time()
        droplet_posterior(each, CONDITIONS)
        spent.append(time.process_time() - start)
    text = f"{1e3 * np.median(spent):.1f} ms"
    return [
        (
            "posterior with P(n), free fit and sensitivities: time",
            "720 frames, one core",
            "<= 5 ms",
            text,
            bool(np.median(spent) < 5e-3),
        )
    ]


def tasks(tracks: int) -> list[tuple[Callable[..., list[Row]], tuple[object, ...]]]:
    """All parts of the study, each with its own seed."""
    jobs: list[tuple[Callable[..., list[Row]], tuple[object, ...]]] = []
    jobs += [(speeds, (r, px, tracks, 100 + i)) for i, (r, px) in enumerate(SPEED_CASES)]
    jobs += [
        (free_diffusion, (5e-7, Plan(), 0.065, tracks, 200)),
        (free_diffusion, (3e-7, Plan(), 0.065, tracks, 201)),
        (free_diffusion, (1.5e-6, Plan(frame_rate=60.0, noise_px=0.3), 0.075, tracks, 202)),
    ]
    jobs += [
        (radius_error, (r, most, tracks, 300 + i))
        for i, (r, most) in enumerate([(3e-7, 0.048), (5e-7, 0.026), (1e-6, 0.0052)])
    ]
    cases = [(3e-7, 0.29), (5e-7, 0.16), (7e-7, 0.095), (1e-6, 0.085)]
    jobs += [(charge_error, (r, most, tracks, 400 + i)) for i, (r, most) in enumerate(cases)]
    jobs += [(numbers, (*case, tracks, 500 + i)) for i, case in enumerate(NUMBER_CASES)]
    jobs += [(ratio_power, (r, tracks // 3, 600 + i)) for i, r in enumerate((5e-7, 1e-6))]
    jobs.append((air, (tracks, 700)))
    return jobs


def main() -> None:
    """Run the study and write the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--tracks", type=int, default=1000)
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()
    start = time.perf_counter()
    rows = duration()
    with ProcessPoolExecutor(options.workers) as pool:
        futures = [pool.submit(function, *arguments) for function, arguments in tasks(options.tracks)]
        rows += [row for future in futures for row in future.result()]
    met = sum(row[4] for row in rows)
    lines = [
        "# Estimation of single droplets: measured against what is demanded",
        "",
        f'{options.tracks} tracks a setting; written by `study_estimation.py`. "Met" allows 2.5 standard deviations of',
        f"the study itself. {met} of {len(rows)} met.",
        "",
        "| what | setting | demand | measured | met |",
        "|---|---|---|---|---|",
    ]
    lines += [f"| {' | '.join(row[:4])} | {'yes' if row[4] else '**no**'} |" for row in rows] + [""]
    (HERE / "estimation.md").write_text("\n".join(lines), encoding="utf-8")
    print(f"{len(rows)} rows, {len(rows) - met} not met, {time.perf_counter() - start:.0f} s")


if __name__ == "__main__":
    main()
