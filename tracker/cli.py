"""Parse, call, print: the commands of `fallrise`. All work lies in the rooms below."""

from __future__ import annotations

import json
import sys
import traceback
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from physics.errors import FallriseError
from tracker.errors import UsageError

if TYPE_CHECKING:
    from tracker.keeping.store import Result

app = typer.Typer(
    name="fallrise",
    help="Fall speed, radius and charge of oil droplets from microscope recordings, with uncertainties that hold.",
    no_args_is_help=True, add_completion=False, pretty_exceptions_enable=False, rich_markup_mode=None,
)  # fmt: skip

_STOPPED = 130  # exit status after Ctrl-C, as shells have it

# Of click, or of the copy of it that newer versions of typer carry within.
_WrongUsage: Any = next(c for c in typer.BadParameter.__mro__ if c.__name__ == "ClickException")

BenchOption = Annotated[
    Path | None, typer.Option("--bench", help="Bench file; default: beside or above the recording.")
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print the result for machines.")]


def _print_version(wanted: bool) -> None:
    """Print the version of the installed package if it was asked for."""
    if wanted:
        from importlib.metadata import version

        typer.echo(f"fallrise {version('fallrise')}")
        raise typer.Exit


@app.callback()
def _options(
    debug: Annotated[bool, typer.Option("--debug", help="Show a traceback when something fails.")] = False,
    version: Annotated[
        bool,
        typer.Option("--version", help="Print the version and end.", callback=_print_version, is_eager=True),
    ] = False,
) -> None:
    """Take the options that hold for every command."""


def _example(line: str) -> str:
    """Give the epilogue of a command's help: one worked example."""
    return f"Example:  {line}"


@app.command(epilog=_example("fallrise measure sample_videos/steady.avi --bench sample_videos/bench.toml"))
def measure(
    recordings: Annotated[list[Path], typer.Argument(help="Video files or folders of pictures.")],
    bench: BenchOption = None,
    out: Annotated[Path | None, typer.Option("--out", help="Result folder; of several recordings: the folder "
                                             "for their result folders.")] = None,
    roi: Annotated[str | None, typer.Option("--roi", help="Part of the picture, X,Y,W,H in px.")] = None,
    start: Annotated[float | None, typer.Option("--from", help="Leave out frames before this time in s.")] = None,
    end: Annotated[float | None, typer.Option("--to", help="Leave out frames after this time in s.")] = None,
    tables: Annotated[str, typer.Option("--tables", help="Format of the tracks: csv or parquet.")] = "csv",
    as_json: JsonOption = False,
) -> None:  # fmt: skip
    """Measure recordings: droplets with fall speed, radius and charge, in a result folder beside each."""
    from tracker.measure import measure as measure_one
    from tracker.settings import make_settings

    settings = make_settings(roi=roi, start=start, end=end, tables=tables)
    results, failures = [], []
    for recording in recordings:
        folder = None if out is None else out if len(recordings) == 1 else out / f"{recording.stem}.fallrise"
        try:
            with _progress(recording.name, hidden=as_json) as progress:
                result = measure_one(recording, bench=bench, out=folder, settings=settings, progress=progress)
        except FallriseError as error:
            if len(recordings) == 1:
                raise
            failures.append(error)
            _complain(error)
            continue
        results.append(result)
        if not as_json:
            _show_result(result)
    if as_json:
        _print_json([_result_json(result) for result in results], single=len(recordings) == 1)
    if failures:
        raise typer.Exit(max(error.exit_status for error in failures))


@app.command(
    epilog=_example('fallrise scale sample_videos/reticle.png --pitch "0.1000(2) mm" --out scale.json')
)
def scale(
    pictures: Annotated[list[Path], typer.Argument(help="Pictures of a stage micrometer, ruled reticle, square grid "
                                                   "or dot grid, or a recording that shows one.")],
    pitch: Annotated[str, typer.Option("--pitch", help="Distance of neighbouring lines or dots with its uncertainty.")],
    pattern: Annotated[str | None, typer.Option("--pattern", help="lines, grid or dots; default: found out.")] = None,
    out: Annotated[Path, typer.Option("--out", help="Scale file; scale.png is drawn beside it.")] = Path("scale.json"),
    as_json: JsonOption = False,
) -> None:  # fmt: skip
    """Measure metres per pixel from pictures of a reference pattern, with an uncertainty that holds."""
    from calibration.drawing import write_scale_files
    from calibration.measure import describe, measure_scale
    from calibration.scale import scale_to_json

    if pattern not in (None, "lines", "grid", "dots"):
        raise UsageError(f"--pattern {pattern}: must be lines, grid or dots")
    measured, found = measure_scale(pictures, pitch_text=pitch, pattern=pattern)
    written = write_scale_files(measured, found, out)
    if as_json:
        _print_json([scale_to_json(measured)], single=True)
        return
    typer.echo("\n".join([describe(measured), *map(str, written)]))


@app.command(epilog=_example("fallrise evaluate sample_videos/steady.fallrise"))
def evaluate(
    results: Annotated[list[Path], typer.Argument(help="Result folders.")],
    bench: BenchOption = None,
    as_json: JsonOption = False,
) -> None:
    """Work out speeds, charges and verdicts again from stored tracks, the present bench and decisions; no video."""
    from tracker.evaluate import evaluate_result

    done = [evaluate_result(folder, bench=bench) for folder in results]
    if as_json:
        _print_json([_result_json(result) for result in done], single=len(results) == 1)
        return
    for result in done:
        _show_result(result)


@app.command(
    epilog=_example("fallrise overlay sample_videos/steady.fallrise --frames 0:200 --out tracks.mp4")
)
def overlay(
    result: Annotated[Path, typer.Argument(help="Result folder.")],
    frames: Annotated[str | None, typer.Option("--frames", help="A:B, first and one past the last frame, or one "
                                               "frame; default: all.")] = None,
    out: Annotated[Path | None, typer.Option("--out", help=".png for one frame, .mp4 or .avi for a video, a folder "
                                             "for a PNG of each frame; default: overlay.mp4 in the result.")] = None,
    recording: Annotated[Path | None, typer.Option("--recording", help="The video, if it was moved.")] = None,
) -> None:  # fmt: skip
    """Draw the tracks over the recording; the verdict can be told by the shape of the mark."""
    from tracker.export import write_overlay

    with _progress("overlay") as progress:
        written = write_overlay(result, frames=frames, out=out, recording=recording, progress=progress)
    typer.echo(str(written))


@app.command(
    epilog=_example('fallrise decide clip.fallrise --droplet 7 --verdict reject --reason "two droplets"')
)
def decide(
    result: Annotated[Path, typer.Argument(help="Result folder.")],
    droplet: Annotated[int, typer.Option("--droplet", help="Number of the droplet.")],
    verdict: Annotated[
        str, typer.Option("--verdict", help="keep, doubt, reject, split, trim, join, reset or undo.")
    ],
    reason: Annotated[str, typer.Option("--reason", help="Why, in your words.")] = "",
    at: Annotated[float | None, typer.Option("--at", help="Time in s at which to split.")] = None,
    start: Annotated[float | None, typer.Option("--from", help="Trim: keep from this time in s.")] = None,
    end: Annotated[float | None, typer.Option("--to", help="Trim: keep to this time in s.")] = None,
    other: Annotated[int | None, typer.Option("--with", help="Join: the other droplet.")] = None,
    as_json: JsonOption = False,
) -> None:
    """Keep a person's decision on a droplet for good, and evaluate again."""
    from tracker.evaluate import decide_and_evaluate

    done = decide_and_evaluate(result, droplet=droplet, verdict=verdict, reason=reason, at=at, start=start, end=end,
                               other=other)  # fmt: skip
    if as_json:
        _print_json([_result_json(done)], single=True)
    else:
        _show_result(done)


@app.command(epilog=_example("fallrise batch term/ --out results/ --workers 4"))
def batch(
    folder: Annotated[Path, typer.Argument(help="Folder with a term's recordings.")],
    out: Annotated[Path | None, typer.Option("--out", help="Output folder; default: fallrise-results in the "
                                             "folder.")] = None,
    bench: Annotated[Path | None, typer.Option("--bench", help="One bench file for all; default: the nearest beside "
                                               "or above each recording.")] = None,
    workers: Annotated[int | None, typer.Option("--workers", help="Processes; default: one a core.")] = None,
    cluster: Annotated[str, typer.Option("--cluster", help="Address of a dask scheduler, such as "
                                         "tcp://10.0.0.5:8786.")] = "",
    tables: Annotated[str, typer.Option("--tables", help="Format of the tracks: csv or parquet.")] = "csv",
    retry: Annotated[bool, typer.Option("--retry", help="Try failed recordings again, though nothing "
                                        "changed.")] = False,
    as_json: JsonOption = False,
) -> None:  # fmt: skip
    """Measure all recordings of a folder; run again, it goes on where it stopped."""
    from tracker.settings import make_settings
    from tracker.term.batch import Options, run_batch
    from tracker.term.terminal import batch_bar, batch_text

    options = Options(bench, make_settings(tables=tables), workers, cluster, retry)
    with batch_bar(hidden=as_json) as progress:
        made = run_batch(folder, out=out, options=options, progress=progress)
    if as_json:
        names = ("recording", "sha256", "status", "droplets", "kept", "seconds", "reason")
        rows = [{name: getattr(entry, name) for name in names} for entry in made.entries]
        _print_json([{"out": str(made.out), "measured": made.measured, "recordings": rows}], single=True)
    else:
        typer.echo(batch_text(made))
    if made.failed:
        raise typer.Exit(1)


@app.command(epilog=_example("fallrise report results/"))
def report(
    folder: Annotated[Path, typer.Argument(help="Result folder, or output folder of a batch.")],
) -> None:
    """Write the HTML report of a result or of a batch again."""
    from tracker.term.report import write_report

    typer.echo(str(write_report(folder)))


@app.command(epilog=_example("fallrise pool term/ --out term/unit"))
def pool(
    results: Annotated[list[Path], typer.Argument(help="Result folders, or folders that hold results.")],
    out: Annotated[
        Path, typer.Option("--out", help="Folder for charge_unit.json and charge_unit.png.")
    ] = Path(),
    as_json: JsonOption = False,
) -> None:
    """Find the charge unit over many results, without assuming e, and what it says of each bench."""
    from tracker.term.pool import pool_results
    from tracker.term.poolfiles import pool_text, write_pool

    found = pool_results(results)
    written = write_pool(found, out)
    if as_json:
        typer.echo(written[0].read_text(encoding="utf-8"), nl=False)
    else:
        typer.echo("\n".join([pool_text(found), *map(str, written)]))


@app.command(
    epilog=_example('fallrise plan --bench bench.toml --voltage "400 V" --plateau "2 s" --out plan.png')
)
def plan(
    bench: BenchOption = None,
    duration: Annotated[
        str, typer.Option("--duration", help="Longest time that a droplet is watched.")
    ] = "60 s",
    plateau: Annotated[
        str, typer.Option("--plateau", help="Time between two changes of the voltage.")
    ] = "3 s",
    voltage: Annotated[
        str | None, typer.Option("--voltage", help="Field-on voltage; default: the bench's.")
    ] = None,
    voltage_max: Annotated[
        str | None, typer.Option("--voltage-max", help="Of the supply; default: 1000 V, or --voltage.")
    ] = None,
    settling: Annotated[
        str, typer.Option("--settling", help="Left out after each change of voltage.")
    ] = "0.1 s",
    pattern: Annotated[str, typer.Option("--pattern", help="Plateaus in turn: 0, + and -.")] = "0,+,0,-",
    frame_rate: Annotated[
        str | None, typer.Option("--frame-rate", help="Default: the bench's, or 25 Hz.")
    ] = None,
    pixel: Annotated[
        str | None, typer.Option("--pixel", help="Size of a pixel; default: the bench's scale.")
    ] = None,
    noise: Annotated[float, typer.Option("--noise", help="Standard deviation of a place in px.")] = 0.1,
    height: Annotated[str | None, typer.Option("--height", help="Of the view, along gravity.")] = None,
    radii: Annotated[str, typer.Option("--radii", help="Radii of droplets.")] = "0.3,0.4,0.5,0.7,1.0 um",
    numbers: Annotated[str, typer.Option("--numbers", help="Charge numbers.")] = "-1,-2,-5,-10",
    droplets: Annotated[int, typer.Option("--droplets", min=1, help="Measured together on one bench.")] = 20,
    out: Annotated[
        Path | None, typer.Option("--out", help="Picture of the plan, .png, .svg or .pdf.")
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Tell the precision that a planned recording can reach, and the best voltage and plateau."""
    from tracker.bench import load_bench
    from tracker.keeping.store import json_text
    from tracker.planning import PlanOptions, plan_recording, planned_recording
    from tracker.planview import draw, plan_json, plan_table

    known = load_bench(bench, recording=None if bench else Path("plan"))
    options = PlanOptions(
        duration=duration, plateau=plateau, voltage=voltage, voltage_max=voltage_max, settling=settling,
        pattern=pattern, frame_rate=frame_rate, pixel=pixel, place_noise_px=noise, view_height=height, radii=radii,
        numbers=numbers, droplets=droplets,
    )  # fmt: skip
    made = plan_recording(known, planned_recording(known, options))
    if out is not None:
        draw(made, out)
    typer.echo(json_text(plan_json(made)) if as_json else plan_table(made))


@app.command(
    epilog=_example("fallrise simulate --out trial.avi --seed 7 --set droplets=20 --bench trial.bench.toml")
)
def simulate(
    out: Annotated[Path, typer.Option("--out", help="Recording: .avi .mp4 .mov .mkv .webm .tif, or a folder for "
                                      "PNG pictures.")] = Path("simulated.avi"),
    scene: Annotated[Path | None, typer.Option("--scene", help="TOML file with fields of the scene.")] = None,
    assign: Annotated[list[str] | None, typer.Option("--set", help="KEY=VALUE, a field of the scene; may be "
                                                     "repeated.")] = None,
    seed: Annotated[int, typer.Option("--seed", min=0, help="The same seed gives the same droplets.")] = 1,
    bench: Annotated[Path | None, typer.Option("--bench", help="Write the bench file of the scene there.")] = None,
    log: Annotated[Path | None, typer.Option("--log", help="Write a voltage log there.")] = None,
    log_early: Annotated[float, typer.Option("--log-early", help="The log's clock shows so many s less.")] = 0.0,
    log_fast: Annotated[float, typer.Option("--log-fast", help="The log's clock runs fast by this share.")] = 0.0,
    show: Annotated[bool, typer.Option("--show", help="Print all fields of the scene; write nothing.")] = False,
    as_json: JsonOption = False,
) -> None:  # fmt: skip
    """Make a recording with known truth, to try settings before a lab day."""
    from tracker import simulate as room

    values = {**(room.read_scene(scene) if scene else {}), **room.read_assignments(assign or [])}
    made = room.scene_from_mapping(values)
    if show:
        typer.echo(room.scene_text(made), nl=False)
        return
    with _progress(out.name, hidden=as_json) as progress:
        files = room.simulate(made, out, seed=seed, progress=progress)
    written = {"recording": files.recording, "truth": files.truth_json, "motion": files.truth_npz}
    if bench is not None:
        written["bench"] = room.write_bench(made, bench, recording=out, log=log)
    if log is not None:
        logger = room.Logger(early=log_early, fast=log_fast)
        written["log"] = room.write_log(made, log, logger=logger, seed=seed)
    if as_json:
        _print_json([{key: str(path) for key, path in written.items()}], single=True)
    else:
        typer.echo("\n".join(str(path) for path in written.values()))


@app.command(epilog=_example("fallrise budget clip.fallrise --droplet 3 --check"))
def budget(
    result: Annotated[Path, typer.Argument(help="Result folder.")],
    droplet: Annotated[int | None, typer.Option("--droplet", help="Only this droplet; default: all.")] = None,
    check: Annotated[
        bool, typer.Option("--check", help="Check by Monte Carlo, a second or so a droplet.")
    ] = False,
    out: Annotated[Path | None, typer.Option("--out", help="CSV file for the table.")] = None,
    as_json: JsonOption = False,
) -> None:
    """Show what the uncertainty of each charge is made of: input, value, uncertainty, sensitivity, share."""
    from tracker.budgeting import budget_table, budgets
    from tracker.keeping.store import replace_file
    from tracker.keeping.tables import BUDGET, write_csv

    made = budgets(result, droplet=droplet, check=check)
    rows = budget_table(made)
    if out is not None:
        replace_file(out, lambda part: write_csv(rows, part, BUDGET))
    if as_json:
        typer.echo(rows.to_json(orient="records", double_precision=15))
        return
    from tracker.showing.terminal import show_budgets

    show_budgets(made)


@app.command(epilog=_example("fallrise inspect sample_videos/steady.fallrise"))
def inspect(
    target: Annotated[Path | None, typer.Argument(help="A result, a folder of results (such as a batch's), or "
                                                  "nothing.")] = None,
    results: Annotated[Path | None, typer.Option("--results", help="Folder for recordings that are dropped on the "
                                                 "page.")] = None,
    port: Annotated[int, typer.Option("--port", min=0, max=65535, help="0: any free one.")] = 0,
    browser: Annotated[bool, typer.Option("--browser/--no-browser", help="Open the page, or only print its "
                                          "address.")] = True,
) -> None:  # fmt: skip
    """Open the inspection page, on this machine only: watch droplets, judge tracks, measure what is dropped."""
    from tracker.page.server import serve

    serve(target, port=port, open_browser=browser, results=results, say=typer.echo)


def _progress(label: str, *, hidden: bool = False) -> Any:
    """Give a progress bar on a terminal and nothing when piped; a callable (done, total) inside a context."""
    from tracker.showing.terminal import progress_bar

    return progress_bar(label, hidden=hidden or not sys.stderr.isatty())


def _show_result(result: Result) -> None:
    """Print the droplet table, what to know about it, and where the files are."""
    from tracker.showing.terminal import show_result

    show_result(result)
    if result.droplets.empty:
        name = result.recording.get("file", "")
        typer.echo(
            f"fallrise: {name}: no droplet was found; look at a frame with `fallrise overlay`", err=True
        )


def _result_json(result: Result) -> dict[str, Any]:
    """Give a result as plain values."""
    droplets = json.loads(result.droplets.to_json(orient="records", double_precision=15))
    recording = {key: value for key, value in result.recording.items() if key != "frame_times_s"}
    return {"result": str(result.folder), "recording": recording, "droplets": droplets}


def _print_json(items: list[Any], *, single: bool) -> None:
    typer.echo(json.dumps(items[0] if single and items else items, indent=1, default=str))


def _complain(error: FallriseError) -> None:
    """Say what failed in one line."""
    line = " ".join(str(error).split())
    typer.echo(f"fallrise: {line}", err=True)


def main(arguments: list[str] | None = None) -> None:
    """Run a command; the process ends with the exit status of the design.

    Parameters
    ----------
    arguments : list of str, optional
        Of the command line; `sys.argv` if not given.
    """
    given = list(sys.argv[1:] if arguments is None else arguments)
    debug = "--debug" in given
    given = [word for word in given if word != "--debug"]
    sys.exit(_run(given, debug=debug))


def _run(arguments: list[str], *, debug: bool) -> int:
    try:
        status = app(args=arguments, prog_name="fallrise", standalone_mode=False)
        if status == _STOPPED:  # some versions of typer turn Ctrl-C into this status themselves
            raise KeyboardInterrupt
        return status if isinstance(status, int) else 0
    except FallriseError as error:
        if debug:
            traceback.print_exc()
        _complain(error)
        return error.exit_status
    except _WrongUsage as error:
        error.show()
        return 2
    except (KeyboardInterrupt, typer.Abort):
        typer.echo("fallrise: stopped; finished work is kept", err=True)
        return _STOPPED
    except Exception as error:
        if debug:
            traceback.print_exc()
        typer.echo(
            f"fallrise: unexpected {type(error).__name__}: {error}; run again with --debug and report it",
            err=True,
        )
        return 1


if __name__ == "__main__":
    main()
