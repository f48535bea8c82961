"""The command line: parse, call, print."""

from __future__ import annotations

import sys
import traceback
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated, Any

import typer

from starkiln.errors import SettingsError, StarkilnError

app = typer.Typer(
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    help="Effective temperatures, radii and luminosities of stars from survey photometry, by the million.",
)

Config = Annotated[Path, typer.Argument(metavar="CONFIG", help="Settings file (TOML).", show_default=False)]
RunDir = Annotated[Path, typer.Argument(metavar="RUN_DIR", help="A run's output folder.", show_default=False)]
Debug = Annotated[bool, typer.Option("--debug", help="Show the traceback of an error.")]

_TOLD = ("python", "emcee", "numpy", "astropy", "pyarrow", "dask", "numba")
"""What --version tells the version of, beside our own."""

EXIT_BUG = 1
EXIT_STOPPED = 5
EXIT_ENVIRONMENT = 74
EXIT_INTERRUPTED = 130


def main() -> None:
    """Run the command line."""
    app(prog_name="starkiln")


@contextmanager
def _errors_told(debug: bool, quiet: bool = False) -> Iterator[None]:
    """Turn an error into one or two lines on standard error and its exit code."""
    try:
        yield
    except StarkilnError as error:
        if debug:
            traceback.print_exc()
        if not (quiet and error.exit_code == EXIT_STOPPED):
            _tell(str(error))
        raise typer.Exit(error.exit_code) from None
    except KeyboardInterrupt:
        _tell("interrupted; run again to go on")
        raise typer.Exit(EXIT_INTERRUPTED) from None
    except (typer.Exit, typer.Abort, BrokenPipeError):
        raise
    except OSError as error:
        if debug:
            traceback.print_exc()
        _tell(f"{error}; mend it and run again")
        raise typer.Exit(EXIT_ENVIRONMENT) from None
    except Exception as error:
        if debug:
            traceback.print_exc()
        first_line = str(error).partition("\n")[0]
        hint = "" if debug else "; --debug shows where"
        _tell(f"unexpected {type(error).__name__}: {first_line} (a bug, please report it{hint})")
        raise typer.Exit(EXIT_BUG) from None


def _tell(text: str) -> None:
    print(f"starkiln: {text}", file=sys.stderr)


def _print_version(wanted: bool) -> None:
    if wanted:
        from starkiln.engine.provenance import versions
        from starkiln.stages.model import METHOD_VERSION

        found = versions()
        print(f"starkiln {found['starkiln']}\nmethod {METHOD_VERSION}")
        for name in _TOLD:
            print(name, found[name])
        raise typer.Exit


@app.callback()
def _starkiln(
    version: Annotated[
        bool, typer.Option("--version", callback=_print_version, is_eager=True, help="Show the versions that matter.")
    ] = False,
) -> None:
    pass


@app.command(
    short_help="Check settings and tables, and print what a run would do.",
    epilog="Example: starkiln check configs/demo.toml --rows",
)
def check(
    config: Config,
    rows: Annotated[
        bool, typer.Option("--rows", help="Read the input, and count new, changed, gone, duplicate and kept rows.")
    ] = False,
    debug: Debug = False,
) -> None:
    """Check settings, passbands and the footers of the input tables, and print the plan."""
    with _errors_told(debug):
        from starkiln.engine.check import count_rows, describe_plan
        from starkiln.engine.progress import open_progress
        from starkiln.settings import load_settings
        from starkiln.stages.bands import build_bands
        from starkiln.tables.source import open_source

        settings = load_settings(config)
        build_bands(settings)
        source = open_source(settings)
        plan = None
        if rows:
            from starkiln.engine.provenance import hashes
            from starkiln.stages.model import build_model

            with open_progress(quiet=False) as progress:
                plan = count_rows(source, settings, hashes(settings, build_model(settings)), progress)
        print(describe_plan(source, settings, plan))


@app.command(
    short_help="Fit the stars, or what is new or left of them, and publish.",
    epilog="Example: starkiln run configs/demo.toml --time-limit 6h --quiet",
)
def run(
    config: Config,
    time_limit: Annotated[
        str | None,
        typer.Option(metavar="TIME", help="End within 6h, 90m, 1h30m or 45s; run again to go on.", show_default=False),
    ] = None,
    refit_all: Annotated[
        bool, typer.Option("--refit-all", help="Fit every row, not only new and changed ones.")
    ] = False,
    retry_failed: Annotated[
        bool, typer.Option("--retry-failed", help="Try again the rows that faults had set aside.")
    ] = False,
    workers: Annotated[
        int | None,
        typer.Option(min=1, help="Worker processes, instead of compute.workers.", show_default=False),
    ] = None,
    scheduler: Annotated[
        str | None,
        typer.Option(metavar="ADDRESS", help="Use the workers of this dask scheduler.", show_default=False),
    ] = None,
    scheduler_file: Annotated[
        Path | None,
        typer.Option(metavar="FILE", help="Use the workers of the dask scheduler of this file.", show_default=False),
    ] = None,
    quiet: Annotated[bool, typer.Option("--quiet", help="Print nothing if all is well.")] = False,
    debug: Debug = False,
) -> None:
    """Fit the stars of the input tables, or what is new or left of them, and publish the catalogue."""
    with _errors_told(debug, quiet):
        from starkiln.engine.stopping import StopFlag, parse_limit

        limit_s = None if time_limit is None else parse_limit(time_limit)
        if scheduler and scheduler_file:
            raise SettingsError("--scheduler and --scheduler-file exclude each other: give one")
        with StopFlag(limit_s) as stop:
            from starkiln.engine.directory import hold
            from starkiln.settings import load_settings

            settings = load_settings(config)
            if workers is not None:
                compute = settings.compute.model_copy(update={"workers": workers})
                settings = settings.model_copy(update={"compute": compute})
            # Before anything heavy is imported, so that a second run on the directory ends at once.
            with hold(settings.run.output):
                from starkiln.engine.preview import first_rows
                from starkiln.engine.progress import open_progress
                from starkiln.engine.run import RunOptions, run_settings

                options = RunOptions(
                    refit_all=refit_all,
                    retry_failed=retry_failed,
                    scheduler=scheduler,
                    scheduler_file=scheduler_file,
                )
                with open_progress(quiet) as progress:
                    result = run_settings(settings, options=options, progress=progress, stop=stop)
                    page = None if result.path is None else _page_of(settings.run.output, result.path, progress, debug)
            if not quiet or result.exit_code:
                print(result.message)
            if not quiet and result.path is not None:
                print(first_rows(result.path))
            if not quiet and page is not None:
                print(f"the quality page is {page}")
            raise typer.Exit(result.exit_code)


def _page_of(run_dir: Path, generation: Path, progress: Any, debug: bool) -> Path | None:
    """Return the quality page, built if need be; a page that fails is told of, and the run has ended as it has."""
    page = run_dir / "report" / "index.html"
    if (generation / "report" / "index.html").is_file():
        return page
    try:
        from starkiln.report.page import build_page

        progress.begin("drawing the quality page", 0)
        build_page(run_dir)
    except Exception as error:
        if debug:
            traceback.print_exc()
        first_line = str(error).partition("\n")[0]
        _tell(f"the quality page could not be built ({type(error).__name__}: {first_line}); the catalogue is whole")
        return None
    return page


@app.command(
    short_help="Build the quality page of a run, or build it again.",
    epilog="Example: starkiln report runs/demo",
)
def report(run_dir: RunDir, debug: Debug = False) -> None:
    """Build the quality page of the published catalogue, or build it again, and print its path."""
    with _errors_told(debug):
        from starkiln.report.page import build_page

        build_page(run_dir)
        print(run_dir / "report" / "index.html")


@app.command(
    short_help="Show one star: numbers, flags, bands and a picture.",
    epilog="Example: starkiln star runs/tamarin-strip TS-T1-0001",
)
def star(
    run_dir: RunDir,
    star_id: Annotated[str, typer.Argument(metavar="ID", help="The star's id.", show_default=False)],
    output: Annotated[
        Path, typer.Option("--output", metavar="FOLDER", help="The folder of the picture.", show_default=False)
    ] = Path(),
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON, with a schema number.")] = False,
    debug: Debug = False,
) -> None:
    """Show one star of a run: its numbers, flags in words and bands, and write a picture of fit and posterior."""
    with _errors_told(debug):
        from starkiln.report.star_command import star as show

        print(show(run_dir, star_id, output, as_json))


@app.command(epilog="Example: starkiln status runs/demo --json")
def status(
    run_dir: RunDir,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON, with a schema number.")] = False,
    debug: Debug = False,
) -> None:
    """Tell where a run stands, also while it is running."""
    with _errors_told(debug):
        import json

        from starkiln.engine.status import describe_status, read_status

        found = read_status(run_dir)
        print(json.dumps(found, indent=2) if as_json else describe_status(found))


@app.command(short_help="Print the folder of the published generation.", epilog="Example: starkiln path runs/demo")
def path(run_dir: RunDir, debug: Debug = False) -> None:
    """Print the folder of the published generation, which stays as it is when a later run publishes."""
    with _errors_told(debug):
        current = run_dir / "current"
        if not current.is_dir():
            raise SettingsError(f"{run_dir} holds no published catalogue: name the run.output of a finished run")
        print(current.resolve())


@app.command(
    short_help="Learn departures from blackbodies from reference stars.",
    epilog="Example: starkiln calibrate my_reference_stars.toml",
)
def calibrate(config: Config, debug: Debug = False) -> None:
    """Learn the departures of photospheres from blackbodies from reference stars of known T and size."""
    with _errors_told(debug):
        from starkiln.engine.calibrating import calibrate_from
        from starkiln.report.departures_figure import save_calibration
        from starkiln.report.departures_text import describe_calibration
        from starkiln.settings import load_settings
        from starkiln.stages.calibrate import section_of

        settings = load_settings(config)
        path = section_of(settings).output
        found = calibrate_from(settings)
        folder = save_calibration(found.learnt.departures, found.teff_k, found.learnt.points, path)
        print(describe_calibration(found, path))
        print(f"pictures are in {folder}")


@app.command(
    short_help="Tell how precise T, R and L will be, before any data.",
    epilog="Example: starkiln forecast configs/forecast.toml",
)
def forecast(
    config: Config,
    quiet: Annotated[bool, typer.Option("--quiet", help="Print nothing if all is well.")] = False,
    debug: Debug = False,
) -> None:
    """Tell how precise T, R and L will be with given bands and errors, and what leaving bands out would cost."""
    with _errors_told(debug):
        from starkiln.engine.progress import open_progress
        from starkiln.report.forecast import check_folder, describe_forecast, save_forecast
        from starkiln.settings.forecast import load_forecast
        from starkiln.stages.forecast import fits_in
        from starkiln.stages.forecast import forecast as forecast_settings

        settings = load_forecast(config)
        check_folder(settings.run.output)
        with open_progress(quiet) as progress:
            progress.begin("fitting invented stars", fits_in(settings))
            table = forecast_settings(settings, progress.advance)
        paths = save_forecast(table, settings.run.output)
        if not quiet:
            print(describe_forecast(table))
            print(f"The table is {paths[0]}, the picture {paths[1]}")


@app.command(short_help="List the built-in passbands, or one in full.", epilog="Example: starkiln passbands gaia_dr3_g")
def passbands(
    name: Annotated[
        str | None, typer.Argument(metavar="NAME", help="Only this one, in full.", show_default=False)
    ] = None,
    debug: Debug = False,
) -> None:
    """List the built-in passbands: pivot wavelength, zero points and source."""
    with _errors_told(debug):
        from starkiln.physics.passbands import describe_passbands, load_passband

        if name is None:
            print(_band_table(describe_passbands()))
        else:
            known = load_passband(name).name
            print(_band_in_full(next(band for band in describe_passbands() if band["name"] == known)))


def _band_table(bands: list[dict[str, Any]]) -> str:
    lines = ["name            pivot [um]  detector  system  AB zero [Jy]  Vega zero [Jy]  error"]
    for band in bands:
        vega = band["zero_point_vega_jy"]
        lines.append(
            f"{band['name']:<16}{band['pivot_um']:<12.4f}{band['detector']:<10}{band['system']:<8}"
            f"{band['zero_point_ab_jy']:<14g}{'-' if vega is None else f'{vega:.6g}':<16}"
            f"{band['zero_point_error']:.3g}"
        )
    return "\n".join([*lines, "Sources: starkiln passbands NAME"])


def _band_in_full(band: dict[str, Any]) -> str:
    lines = [
        f"{key:<19}{value:.6g}" if isinstance(value, float) else f"{key:<19}{value}" for key, value in band.items()
    ]
    return "\n".join(lines)
