"""The command ``quietlimb``: a thin skin over the plain functions, the last file of the flow.

Exit codes: 0 done; 2 the input is at fault, and nothing was overwritten but what ``--update``
had asked for before that came to light; 1 the program is at fault or a fit did not converge.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated, NoReturn

import typer
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
from rich.progress import Progress as Bars

from sims.errors import InputError

EXIT_INPUT = 2
EXIT_FAILED = 1

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help=(
        "From radiometer spectra of the low-frequency sky to the turning points of the cosmic-dawn trough.\n\n"
        "Begin with `quietlimb new DIR`, look at what it wrote, `quietlimb check DIR/campaign.toml`, then "
        "`quietlimb run DIR/campaign.toml --out DIR/out`.\n\n"
        "Exit codes: 0 done; 2 bad input, nothing was overwritten unless --update asked for it; 1 anything else."
    ),
)

ConfigFile = Annotated[Path, typer.Argument(metavar="CONFIG", help="Configuration, TOML.", show_default=False)]
OutFolder = Annotated[
    Path, typer.Option("--out", metavar="DIR", help="Folder for everything made.", show_default=False)
]
Update = Annotated[
    bool,
    typer.Option(
        "--update",
        help="DIR holds products of a changed configuration: redo what the change touches and replace it.",
    ),
]


@app.command()
def run(config: ConfigFile, out: OutFolder, update: Update = False) -> None:
    """Observe a mock campaign and reduce it to turning points.

    Writes spectra.nc, truth.nc, bundle.nc, posterior.nc, turning_points.json,
    combined_spectrum.txt, transfer.nc, six plots, gas.txt, summary.txt, run.json and log.txt. Run again, it
    reuses what still holds; a folder of another configuration is refused without --update.
    """
    from reduce.pipeline import run as run_campaign  # noqa: PLC0415

    with _complaints(), _bars() as progress:
        outcome = run_campaign(config, out, update=update, progress=progress)
    _closing(outcome.summary, outcome.folder, outcome.redone, outcome.reused)


@app.command()
def fit(
    spectra: Annotated[
        Path,
        typer.Argument(
            metavar="SPECTRA",
            help="Spectra: NetCDF, or CSV with frequency_mhz, temperature_k, sigma_k and optionally bin, w, width_mhz.",
            show_default=False,
        ),
    ],
    config: ConfigFile,
    out: OutFolder,
    covariance: Annotated[
        Path | None,
        typer.Option(
            "--covariance", metavar="FILE", help="CSV matrix, K^2: covariance of all rows of a CSV table, for sigma_k."
        ),
    ] = None,
    update: Update = False,
) -> None:
    """Find the turning points in spectra that somebody measured.

    CONFIG needs [run], [foreground] and [turning_points] only. Writes what `run` does,
    but for spectra and truth.
    """
    from reduce.pipeline import fit as fit_spectra  # noqa: PLC0415

    with _complaints(), _bars() as progress:
        outcome = fit_spectra(spectra, config, out, covariance_path=covariance, update=update, progress=progress)
    _closing(outcome.summary, outcome.folder, outcome.redone, outcome.reused)


@app.command()
def check(config: ConfigFile) -> None:
    """Judge a configuration: its errors, or what to expect of a run.

    Prints every value as resolved, the geometry, the noise to expect, time and memory.
    Writes nothing.
    """
    from reduce.preview import preview  # noqa: PLC0415

    with _complaints():
        typer.echo(preview(config))


@app.command()
def timeline(config: ConfigFile, out: OutFolder, update: Update = False) -> None:
    """Find when it is quiet: Earth hidden, Sun hidden, both.

    Prints sums, months, orbits and windows, from the first to the last sample of
    [observation], and writes timeline.csv (windows), timeline_orbits.csv or
    timeline_days.csv, and timeline.png. Files already there are refused without --update.
    """
    from reduce.report.timeline_page import report_timeline  # noqa: PLC0415

    with _complaints():
        typer.echo(report_timeline(config, out, update=update))


@app.command()
def sky(
    config: ConfigFile,
    out: Annotated[
        Path | None, typer.Option("--out", metavar="DIR", help="Folder for page and plots; none: print only.")
    ] = None,
    update: Update = False,
) -> None:
    """Judge the sky: maps, spectrum, smoothness.

    Prints what was read and done to it, and with --out writes sky.txt, sky_maps.png, sky_index.png and
    sky_spectrum.png. Files already there are refused without --update.
    """
    from reduce.report.sky_page import report_sky  # noqa: PLC0415

    with _complaints():
        typer.echo(report_sky(config, out, update=update))


@app.command()
def beam(
    config: ConfigFile,
    out: Annotated[
        Path | None, typer.Option("--out", metavar="DIR", help="Folder for page and plots; none: print only.")
    ] = None,
    update: Update = False,
) -> None:
    """Judge the beam: gain, losses, chromaticity.

    Prints what the antenna is over the band, and with --out writes beam.txt, beam_cuts.png, beam_quality.png,
    beam_change.png and beam_residual.png. Files already there are refused without --update.
    """
    from reduce.report.beam_page import report_beam  # noqa: PLC0415

    with _complaints():
        typer.echo(report_beam(config, out, update=update))


@app.command()
def compare(
    source: Annotated[
        Path,
        typer.Argument(
            metavar="CONFIG|DIR",
            help="Folder of a run, or a configuration, whose mock is then observed first.",
            show_default=False,
        ),
    ],
    out: Annotated[
        Path | None, typer.Option("--out", metavar="DIR", help="Folder for page, table and plot; none: print only.")
    ] = None,
    families: Annotated[
        str | None,
        typer.Option("--families", metavar="A,B", help="Foreground families to try; all by default."),
    ] = None,
    terms: Annotated[
        str | None,
        typer.Option("--terms", metavar="N-M", help="Numbers of terms to try, 4-10 or 5,7; 4-10 by default."),
    ] = None,
    update: Update = False,
) -> None:
    """Fit many foregrounds: how much is enough?

    Prints for each family and number of terms chi-squared, AIC, BIC, evidence, cross-validation, whiteness of the
    residuals and the turning points, and marks one row by a stated rule. With --out writes compare.txt, compare.csv and
    compare.png. Files already there are refused without --update.
    """
    from reduce.report.compare_page import numbers_from, report_compare  # noqa: PLC0415

    with _complaints(), _bars() as progress:
        page = report_compare(
            source,
            out,
            families=None if families is None else [name.strip() for name in families.split(",")],
            terms=None if terms is None else numbers_from(terms),
            update=update,
            progress=progress,
        )
    typer.echo(page)


@app.command()
def trust(
    config: ConfigFile,
    out: OutFolder,
    mocks: Annotated[
        int, typer.Option("--mocks", metavar="N", help="Mocks with a signal, and as many without; 1000 for a record.")
    ] = 200,
    outside: Annotated[
        list[Path] | None,
        typer.Option(
            "--outside",
            metavar="CONFIG2",
            help="Another world, named by its file: same channels and bins, another map, antenna or [knowledge]. Again "
            "for more.",
            show_default=False,
        ),
    ] = None,
    processes: Annotated[int, typer.Option("--processes", metavar="P", help="Processes that reduce mocks.")] = 2,
    update: Update = False,
) -> None:
    """Test the stated errors: when do they hold?

    Makes N mocks as [knowledge] has them, N without a signal, and some of worlds that the reduction does not expect: a
    finer index field, an erring map, and those of --outside. Reduces each as CONFIG says. Prints coverage, pulls, false
    alarms and chi-squared, with a verdict of each world: stated errors hold, do not hold, or N mocks cannot tell.
    Writes trust.txt, trust.json, trust.png and, mock by mock, trust.nc. Takes about half a second a mock and process.
    Files already there are refused without --update.
    """
    from reduce.report.trust_page import report_trust  # noqa: PLC0415

    with _complaints(), _bars() as progress:
        page = report_trust(
            config,
            out,
            mocks=mocks,
            outside=outside or [],
            processes=processes,
            update=update,
            progress=progress,
        )
    typer.echo(page)


@app.command()
def new(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="Folder to begin in.", show_default=False)],
) -> None:
    """Write a commented starter configuration to DIR/campaign.toml."""
    from reduce.starter import new as write_starter  # noqa: PLC0415

    with _complaints():
        path = write_starter(folder)
    typer.echo(f"wrote {path}\nnext: quietlimb check {path}")


def main() -> NoReturn:
    """Entry point of the installed command."""
    app()
    raise SystemExit(0)


@contextmanager
def _complaints() -> Iterator[None]:
    """Bad input as plain lines and exit code 2; a fit without convergence as one line and 1."""
    try:
        yield
    except InputError as error:
        count = len(error.problems)
        typer.echo(f"quietlimb: {count} problem{'s' if count > 1 else ''}", err=True)
        for problem in error.problems:
            typer.echo(f"  {problem}", err=True)
        raise typer.Exit(EXIT_INPUT) from None
    except RuntimeError as error:
        typer.echo(f"quietlimb: {error}", err=True)
        raise typer.Exit(EXIT_FAILED) from None


@contextmanager
def _bars():  # type: ignore[no-untyped-def]
    """Progress bars on standard error, one a long step; where none is asked for, nothing is written."""
    columns = (TextColumn("{task.description:28}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    bars = Bars(*columns, console=Console(stderr=True))

    @contextmanager
    def bar(title: str, total: int):  # type: ignore[no-untyped-def]
        bars.start()
        task = bars.add_task(title, total=total)
        yield lambda done: bars.advance(task, done)
        bars.update(task, completed=total)

    try:
        yield bar
    finally:
        if bars.tasks:
            bars.stop()


def _closing(summary: str, folder: Path, redone: tuple[str, ...], reused: tuple[str, ...]) -> None:
    typer.echo(summary)
    typer.echo(f"redone: {', '.join(redone) or 'nothing'}; reused: {', '.join(reused) or 'nothing'}; all in {folder}")
