"""The commands: each parses its arguments, calls one function, prints. Heavy imports wait until a command runs."""

import functools
import math
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from kondomf.errors import InputError

if TYPE_CHECKING:
    from kondomf.material import Material
    from kondomf.report.outputs import Outputs

OBSERVABLES = ("magnetization", "grand_potential")
EXIT_NUMERICS, EXIT_INPUT, EXIT_INTERRUPTED = 1, 2, 130

FilePath = click.Path(path_type=Path)


def outputs(*names: str) -> Callable[[Any], Any]:
    """Add the output options that a command offers, out of json, figure, data and state, and --overwrite.

    The command gets them as one argument `out`, checked.
    """
    texts = {
        "json": "write the result as JSON to FILE, or to standard output with -",
        "figure": "write a figure to FILE (.png, .pdf or .svg)",
        "data": "write the numbers of the figure to FILE (CSV)",
        "state": "write the solution to FILE (HDF5), for bands and effective",
    }

    def decorate(command: Any) -> Any:
        @functools.wraps(command)
        def checked(*args: Any, overwrite: bool, **options: Any) -> Any:
            from kondomf.report.outputs import Outputs

            files = {name: options.pop(f"{name}_file") for name in names}
            return command(*args, out=Outputs(**files, overwrite=overwrite), **options)

        checked = click.option("--overwrite", is_flag=True, help="replace output files that exist")(checked)
        for name in reversed(names):
            option = click.option(f"--{name}", f"{name}_file", type=FilePath, metavar="FILE", help=texts[name])
            checked = option(checked)
        return checked

    return decorate


def example(text: str) -> str:
    """Epilog with one worked example."""
    return f"\b\nExample:\n  {text}"


class Group(click.Group):
    """Turns errors a user can mend into one message and the exit codes of the interface."""

    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except InputError as error:
            click.echo(f"error: {error}", err=True)
            ctx.exit(EXIT_INPUT)
        except OSError as error:
            if error.filename is None:
                raise
            click.echo(f"error: {error.filename}: {error.strerror}; check its name, place and permissions", err=True)
            ctx.exit(EXIT_INPUT)
        except KeyboardInterrupt:
            click.echo("interrupted; nothing half-written was left", err=True)
            ctx.exit(EXIT_INTERRUPTED)


@click.group(cls=Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="kondomf")
def main() -> None:
    """Mean-field phases of conduction electrons on Kitaev magnets, and the quantum oscillations they would show."""


@main.command(epilog=example("kondomf new my_layers"))
@click.argument("folder", type=FilePath)
@click.option("--overwrite", is_flag=True, help="replace files that exist")
def new(folder: Path, overwrite: bool) -> None:
    """Write a commented material and sweep file of an invented heterostructure into FOLDER."""
    from kondomf.material import write_templates

    for path in write_templates(folder, overwrite=overwrite):
        click.echo(f"wrote {path}")


@main.command(epilog=example("kondomf check material.toml"))
@click.argument("material", type=FilePath)
@outputs("json")
def check(material: Path, out: "Outputs") -> None:
    """Validate a MATERIAL file and show what follows from it, with warnings where the method leaves its range."""
    from kondomf.material import derive, load_material, table
    from kondomf.report.tables import align

    derived = derive(load_material(material))
    lines = [align(table(derived)), *(f"warning: {text}" for text in derived.warnings)]
    out.report(derived.to_dict(), "\n".join(lines), click.echo)


@main.command(epilog=example("kondomf solve material.toml --state state.h5 --json result.json"))
@click.argument("material", type=FilePath)
@click.option("--start", "start", metavar="NAME", help='use this standard start alone, e.g. "decoupled M1"')
@click.option("--keep-saddle", is_flag=True, help="with --start: stop at the nearest stationary point, even a saddle")
@click.option("--quiet", is_flag=True, help="do not report the starts as they finish")
@click.option("--along", metavar="KEY=FROM:TO", help="follow every branch of minima along a number of the material")
@click.option(
    "--precision",
    type=float,
    metavar="NUMBER",
    help="with --along: of the ends [default: range/10000]",
)
@outputs("json", "state", "figure", "data")
@click.pass_context
def solve(
    ctx: click.Context,
    material: Path,
    start: str | None,
    keep_saddle: bool,
    quiet: bool,
    along: str | None,
    precision: float | None,
    out: "Outputs",
) -> None:
    """Find the lowest state of a MATERIAL and certify it. Exit code 1 if it is no minimum.

    With --along KEY=FROM:TO, e.g. kondo.coupling_meV=0:3000: all branches of minima that searches at both ends and in
    the middle meet are followed to their ends, with spinodals, continuous and first-order transitions.
    """
    from kondomf.material import load_material
    from kondomf.meanfield import Settings, named_start, save_state, thermodynamics
    from kondomf.meanfield import solve as solve_material
    from kondomf.phases import summarize
    from kondomf.report.tables import LIMITS, solution_table

    if keep_saddle and start is None:
        raise InputError("--keep-saddle studies one start: name it with --start")
    layers = load_material(material)
    report = None if quiet else lambda text: click.echo(text, err=True)
    if along is not None:
        if start is not None or out.state is not None:
            raise InputError("--along searches and follows all branches; leave out --start and --state")
        _solve_along(layers, along, precision, report, out)
        return
    if precision is not None or out.figure is not None or out.data is not None:
        raise InputError("--precision, --figure and --data belong to --along KEY=FROM:TO")
    solution = solve_material(
        layers,
        only_starts=None if start is None else [named_start(layers, start)],
        settings=Settings(keep_saddle=keep_saddle),
        progress=report,
    )
    if out.state is not None:
        save_state(solution, out.state, overwrite=out.overwrite)
    summary = summarize(solution) | {"thermodynamics": thermodynamics(solution).to_dict()}
    out.report(summary, f"{solution_table(summary)}\n{LIMITS}", click.echo)
    ctx.exit(0 if solution.converged else EXIT_NUMERICS)


def _solve_along(
    material: "Material", along: str, precision: float | None, report: Callable[[str], None] | None, out: "Outputs"
) -> None:
    """Follow and report the branches along KEY=FROM:TO."""
    from kondomf.meanfield import follow_branches
    from kondomf.phases.along import describe
    from kondomf.report.branches import draw_branches
    from kondomf.report.tables import LIMITS, align

    try:
        key, _, ends = along.partition("=")
        low, high = (float(end) for end in ends.split(":"))
    except ValueError:
        raise InputError(f"--along {along!r}: give KEY=FROM:TO like kondo.coupling_meV=0:3000") from None
    found = describe(follow_branches(material, key, low, high, precision=precision, progress=report))
    out.draw(lambda figure: draw_branches(figure, found), (7.0, 7.0))
    out.write_columns(found.columns())
    out.report(found.to_dict(), f"{align(found.rows())}\n{LIMITS}", click.echo)


@main.command(epilog=example("kondomf bands state.h5 --figure bands.png --window 200"))
@click.argument("state", type=FilePath)
@click.option("--window", "window_meV", type=float, metavar="MEV", help="energies shown, from -MEV to MEV")
@click.option("--points", type=click.IntRange(10), default=600, show_default=True, help="wave vectors along the path")
@click.option(
    "--grid", type=click.IntRange(4), default=96, show_default=True, help="density of states: k per direction"
)
@outputs("json", "figure", "data")
def bands(
    state: Path,
    window_meV: float | None,
    points: int,
    grid: int,
    out: "Outputs",
) -> None:
    """Quasiparticle bands of a solved STATE along Γ-K-M-Γ, coloured by conduction weight, and density of states."""
    from kondomf.meanfield import load_state
    from kondomf.phases.band_structure import band_structure
    from kondomf.report.bands import draw_band_structure
    from kondomf.report.tables import align

    _check_window(window_meV)
    found = band_structure(load_state(state), points, grid, window_meV)
    out.draw(lambda figure: draw_band_structure(figure, found), (7.0, 4.0))
    out.write_columns(found.columns())
    out.report(found.to_dict(), align(found.rows()), click.echo)


@main.command(epilog=example("kondomf sweep sweep.toml --run results/map --workers 2"))
@click.argument("sweep_file", metavar="SWEEP", type=FilePath)
@click.option(
    "--run", "folder", type=FilePath, metavar="FOLDER", help="run folder [default: SWEEP without .toml, + .run]"
)
@click.option("--workers", type=click.IntRange(1), default=1, show_default=True, help="processes on this machine")
@click.pass_context
def sweep(ctx: click.Context, sweep_file: Path, folder: Path | None, workers: int) -> None:
    """Compute all points of a SWEEP file, or resume a sweep that was interrupted.

    The first Ctrl-C lets the running points finish and ends with exit code 130; the same command goes on from there.
    """
    from kondomf.sweep import console_progress, run_sweep

    folder = folder or sweep_file.with_suffix(".run")
    backend = "serial" if workers == 1 else "local"
    outcome = run_sweep(sweep_file, folder, workers=workers, backend=backend, progress=console_progress())
    click.echo(f"{outcome.done} points done, {outcome.failed} failed, {outcome.remaining} to do, in {folder}")
    if outcome.problem:
        click.echo(f"error: {outcome.problem}", err=True)
    if outcome.interrupted:
        ctx.exit(EXIT_INTERRUPTED)
    ctx.exit(EXIT_NUMERICS if outcome.problem or outcome.remaining else 0)


@main.command(epilog=example("kondomf progress results/map"))
@click.argument("run", type=FilePath)
def progress(run: Path) -> None:
    """Show how far a RUN folder is, also while it is being computed."""
    from kondomf.sweep import open_run, progress_text

    click.echo(progress_text(open_run(run)))


@main.command("map", epilog=example("kondomf map results/map --figure map.png --cut conduction_layer.filling=0.95"))
@click.argument("run", type=FilePath)
@click.option(
    "--class", "phase_class", metavar="NAME", help="class of solutions shown [default: the first of the sweep]"
)
@click.option(
    "--cut", metavar="KEY=VALUE", multiple=True, help="line cut at the grid value nearest to VALUE; repeatable"
)
@outputs("json", "figure", "data")
def map_(
    run: Path,
    phase_class: str | None,
    cut: tuple[str, ...],
    out: "Outputs",
) -> None:
    """Phase map of a RUN over its two axes with the regions named, or line cuts of F, hybridization and moments."""
    from kondomf.report.map import draw, figure_size, read_map
    from kondomf.report.tables import LIMITS
    from kondomf.sweep import open_run

    found = read_map(open_run(run), phase_class, cut)
    out.draw(lambda figure: draw(figure, found), figure_size(found))
    out.write_columns(found.columns())
    out.report(found.to_dict(), f"{found.text()}\n{LIMITS}", click.echo)


@main.command(epilog=example("kondomf effective material.toml --json model.json"))
@click.argument("source", type=FilePath)
@click.option(
    "--window", "window_meV", type=float, default=50.0, show_default=True, metavar="MEV", help="energy window"
)
@outputs("json")
@click.pass_context
def effective(ctx: click.Context, source: Path, window_meV: float, out: "Outputs") -> None:
    """Four-band model of the heavy Fermi liquid of SOURCE: a solved state (.h5) or a material file.

    A material is solved by the isotropic reduced equations, which cost nothing at meV scales. They hold for the so4
    form, isotropic couplings and no moments; use solve --state for anything else.
    """
    from kondomf.effective import effective_model
    from kondomf.report.tables import LIMITS, align

    _check_window(window_meV)
    found = effective_model(source, window_meV)
    out.report(found.to_dict(), f"{align(found.rows())}\n{LIMITS}", click.echo)
    ctx.exit(0 if found.converged else EXIT_NUMERICS)


@main.command(
    epilog=example("kondomf oscillations model.json --fields 10,15,20 --temperatures 0.2:20:60 --figure r.png")
)
@click.argument("model", type=FilePath)
@click.option("--fields", default="10,15,20", show_default=True, metavar="TESLA", help="list, or FROM:TO:POINTS")
@click.option(
    "--temperatures", default="0.2:20:60", show_default=True, metavar="KELVIN", help="list, or FROM:TO:POINTS"
)
@click.option("--harmonic", type=click.IntRange(1), default=1, show_default=True)
@click.option("--observable", type=click.Choice(OBSERVABLES), default=OBSERVABLES[0], show_default=True)
@click.option(
    "--dingle",
    type=click.FloatRange(0),
    default=0.0,
    show_default=True,
    metavar="KELVIN",
    help="Dingle temperature of the electrons",
)
@outputs("json", "figure", "data")
def oscillations(
    model: Path,
    fields: str,
    temperatures: str,
    harmonic: int,
    observable: str,
    dingle: float,
    out: "Outputs",
) -> None:
    """Quantum oscillations of an effective MODEL (JSON written by effective): amplitude against temperature.

    Beside each curve stands the Lifshitz-Kosevich curve of the same cyclotron mass. The parameters are those of the
    temperature at which the model was obtained.
    """
    from kondomf.effective import read_model
    from kondomf.oscillations import predict
    from kondomf.report.oscillations import draw_prediction
    from kondomf.report.tables import LIMITS, align

    found = predict(
        read_model(model),
        number_list("--fields", fields),
        number_list("--temperatures", temperatures),
        harmonic=harmonic,
        observable=observable,
        dingle_K=dingle,
    )
    out.draw(lambda figure: draw_prediction(figure, found), (7.0, 5.5))
    out.write_columns(found.table.columns())
    out.report(found.to_dict(), f"{align(found.rows())}\n{LIMITS}", click.echo)


@main.command(epilog=example("kondomf fit amplitudes.csv --model model.json --figure fit.png"))
@click.argument("amplitudes", type=FilePath)
@click.option("--model", "model_file", type=FilePath, required=True, metavar="FILE", help="JSON written by effective")
@click.option("--harmonic", type=click.IntRange(1), default=1, show_default=True)
@click.option("--observable", type=click.Choice(OBSERVABLES), default=OBSERVABLES[0], show_default=True)
@click.option("--common-scale", is_flag=True, help="all fields share one calibration; adds a Dingle temperature")
@outputs("json", "figure", "data")
@click.pass_context
def fit(
    ctx: click.Context,
    amplitudes: Path,
    model_file: Path,
    harmonic: int,
    observable: str,
    common_scale: bool,
    out: "Outputs",
) -> None:
    """Do measured AMPLITUDES (CSV) favour Lifshitz-Kosevich or the hybridized model, and with which hybridization?

    Columns: field_T, temperature_K, amplitude and, if known, amplitude_error. E_D, velocities and spinon level are
    taken from the model; its hybridization is what is fitted.
    """
    from kondomf.effective import read_model
    from kondomf.measured import fit_amplitudes, read_amplitudes
    from kondomf.report.fit import draw_fit
    from kondomf.report.tables import LIMITS, align

    model, data = read_model(model_file), read_amplitudes(amplitudes)
    found = fit_amplitudes(data, model, observable=observable, harmonic=harmonic, common_scale=common_scale)
    out.draw(lambda figure: draw_fit(figure, found), (7.0, 5.0))
    out.write_columns(found.columns())
    out.report(found.to_dict(), f"{align(found.rows())}\n{LIMITS}", click.echo)
    ctx.exit(0 if all(one.converged for one in found.fits) else EXIT_NUMERICS)


@main.command(epilog=example("kondomf warmup"))
def warmup() -> None:
    """Compile the kernels ahead of time, once per machine and version.

    Without it the first computation that is long enough compiles them, and short ones do with plain numpy.
    """
    import time

    from kondomf.meanfield.kernels import compile_now, kept

    began, there = time.perf_counter(), kept()
    if not there:
        click.echo("compiling the kernels, some 20 seconds", err=True)
    compile_now()
    done = "were compiled already" if there else f"compiled in {time.perf_counter() - began:.0f} s"
    click.echo(f"kernels {done}" + ("" if kept() else "; no directory can keep them: set NUMBA_CACHE_DIR"))


def number_list(option: str, text: str) -> list[float]:
    """Numbers "1,2,5" or "FROM:TO:POINTS" (evenly spaced), all above zero. Raises InputError for anything else."""
    import numpy as np

    numbers: list[float] = []
    try:
        if ":" in text:
            first, last, points = text.split(":")
            numbers = [float(x) for x in np.linspace(float(first), float(last), int(points))]
        else:
            numbers = [float(x) for x in text.split(",")]
    except ValueError:
        pass
    if not numbers or not all(0 < number < math.inf for number in numbers):
        raise InputError(f"{option} {text!r}: give numbers above zero like 10,15,20, or FROM:TO:POINTS like 0.2:20:60")
    return numbers


def _check_window(window_meV: float | None) -> None:
    if window_meV is not None and not 0 < window_meV < math.inf:
        raise InputError(f"--window {window_meV:g}: give a finite energy in meV above zero")


if __name__ == "__main__":
    sys.exit(main())
