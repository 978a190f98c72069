"""The command line: one function per command, no logic."""

# ruff: noqa: PLC0415 - the commands import the heavy modules, so that `--help` answers at once

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Annotated

import typer

from loopint.core.errors import LoopintError
from loopint.pipeline.startup import leave_out_pandas

app = typer.Typer(
    name="loopint",
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
)
UNUSABLE = 2
ATTENTION = 3
INTERRUPTED = 130
CONFIG = Annotated[Path, typer.Argument(metavar="CONFIG", help="TOML file of the run.")]
JSON = Annotated[bool, typer.Option("--json", help="Print JSON on stdout, and nothing else.")]
QUIET = Annotated[bool, typer.Option("--quiet", "-q", help="Print only what needs attention.")]


def _version(wanted: bool) -> None:
    if wanted:
        from loopint import __version__

        typer.echo(f"loopint {__version__}")
        raise typer.Exit


@app.callback()
def loopint(
    version: Annotated[
        bool,
        typer.Option("--version", callback=_version, is_eager=True, help="Print the version."),
    ] = False,
) -> None:
    """One-loop scalar integrals over many kinematic points, every number with a proven error bound.

    Exit codes: 0 done; 2 unusable config, input or arguments; 3 finished, but some rows were
    rejected, stayed below the asked digits, or failed the cross-check.
    """


@app.command(epilog="Example: loopint run configs/quickstart.toml --workers 2")
def run(
    config: CONFIG,
    overwrite: Annotated[
        bool, typer.Option("--overwrite", help="Replace the results of an earlier run.")
    ] = False,
    workers: Annotated[
        int | None,
        typer.Option(min=1, max=1024, help="Worker processes, instead of [execution] workers."),
    ] = None,
    as_json: JSON = False,
    quiet: QUIET = False,
) -> None:
    """Evaluate and cross-check all points; an interrupted run continues."""
    from loopint.console import progress_bar, show_attention, show_run
    from loopint.pipeline.config import load_config
    from loopint.pipeline.run import run_config

    settings = load_config(config)
    try:
        with progress_bar("evaluating", silent=quiet or as_json) as progress:
            outcome = run_config(settings, overwrite=overwrite, workers=workers, progress=progress)
    except KeyboardInterrupt:
        typer.echo("loopint: interrupted; the same command continues", err=True)
        raise typer.Exit(INTERRUPTED) from None
    report_file = _try_report(outcome.directory)
    if as_json:
        page = None if report_file is None else str(report_file)
        files = {"directory": str(outcome.directory), "report": page}
        typer.echo(json.dumps({**outcome.summary, **files}, indent=2))
    elif quiet:
        show_attention(outcome)
    else:
        show_run(outcome, report_file)
    raise typer.Exit(outcome.exit_code)


def _try_report(directory: Path) -> Path | None:
    """Write the page of a run; a run is not less finished without it."""
    from loopint.report import write_report

    try:
        return write_report(directory)
    except Exception as error:  # whatever it is, the numbers are there
        typer.echo(f"loopint: the run is complete, but report.html is not: {error}", err=True)
        return None


@app.command(epilog="Example: loopint grid configs/compare.toml")
def grid(
    config: CONFIG,
    overwrite: Annotated[
        bool, typer.Option("--overwrite", help="Replace a file that does not hold this grid.")
    ] = False,
) -> None:
    """Write the points of [grid] to the file of [points]."""
    from loopint.console_grid import show_grid
    from loopint.pipeline.config import GridRunConfig, load_config_as
    from loopint.pipeline.grid import write_grid

    show_grid(write_grid(load_config_as(GridRunConfig, config), overwrite=overwrite))


@app.command(epilog="Example: loopint compare configs/compare.toml")
def compare(
    config: CONFIG,
    as_json: JSON = False,
) -> None:
    """Compare your own formulas or numbers with proven coefficients, region by region."""
    from loopint.console import progress_bar
    from loopint.console_compare import comparisons_as_dict, show_comparisons
    from loopint.pipeline.compare import compare_config
    from loopint.pipeline.config import load_config

    with progress_bar("comparing", silent=as_json) as progress:
        outcomes, path = compare_config(load_config(config), progress=progress)
    if as_json:
        typer.echo(json.dumps(comparisons_as_dict(outcomes, path), indent=2))
    else:
        show_comparisons(outcomes, path)
    raise typer.Exit(0 if all(outcome.agrees for outcome in outcomes) else ATTENTION)


@app.command(epilog="Example: loopint interpolate configs/interpolate.toml")
def interpolate(config: CONFIG) -> None:
    """Build interpolants over a range of p^2 whose error is proven, for fits."""
    from loopint.console import show_interpolants
    from loopint.interpolation.build import build_interpolants
    from loopint.pipeline.config import InterpolationRunConfig, load_config_as

    show_interpolants(build_interpolants(load_config_as(InterpolationRunConfig, config)))


@app.command(epilog="Example: loopint report runs/quickstart")
def report(
    run: Annotated[Path, typer.Argument(metavar="RUN", help="Directory of a finished run.")],
) -> None:
    """Write report.html of a finished run again, from its files."""
    from loopint.report import write_report

    typer.echo(str(write_report(run)))


@app.command(
    epilog="""\b
Examples:
  loopint validate configs/quickstart.toml
  loopint validate runs/quickstart --rows 100"""
)
def validate(
    path: Annotated[
        Path,
        typer.Argument(metavar="CONFIG|RUN", help="Config file (TOML), or a run directory."),
    ],
    rows: Annotated[
        int, typer.Option(min=0, max=10**6, help="Rows of a run that are evaluated again.")
    ] = 20,
    seed: Annotated[int, typer.Option(help="Draws these rows.")] = 1,
    as_json: JSON = False,
    quiet: QUIET = False,
) -> None:
    """Check config and points before a run, or verify a finished run.

    Of a config: regions, rejected rows and the estimated time, without evaluating.  Of a run
    directory: hashes, counts and conventions, and some rows evaluated again.
    """
    from dataclasses import asdict

    if path.is_dir():
        _verify(path, rows, seed, as_json, quiet)

    from loopint.console import progress_bar, show_rejections, show_survey
    from loopint.pipeline.config import load_config
    from loopint.pipeline.estimate import survey_config

    with progress_bar("checking", silent=quiet or as_json) as progress:
        survey = survey_config(load_config(path), progress=progress)
    if as_json:
        typer.echo(json.dumps(asdict(survey), indent=2, default=str))
    elif quiet:
        show_rejections(survey)
    else:
        show_survey(survey)
    raise typer.Exit(survey.exit_code)


def _verify(path: Path, rows: int, seed: int, as_json: bool, quiet: bool) -> None:
    from dataclasses import asdict

    from loopint.console import show_findings, show_verification
    from loopint.pipeline.verify import verify_run

    found = verify_run(path, rows=rows, seed=seed)
    if as_json:
        typer.echo(json.dumps(asdict(found), indent=2, default=str))
    elif quiet:
        show_findings(found)
    else:
        show_verification(found)
    raise typer.Exit(found.exit_code)


@app.command(
    epilog="""\b
Examples:
  loopint point bubble --p-squared 5 --m1-squared 1 --m2-squared 1/4 --orders -1,2
  loopint point bubble --p-squared -1 --m1 1.2 --width1 0.01 --m2 0 --cross-check
  loopint point bubble --p-squared 5 --m1 1 --m2 1/2 --derivative p_squared
  loopint point tadpole --m-squared 1,-1/10 --powers 2 --digits 50 --json"""
)
def point(
    family: Annotated[str, typer.Argument(metavar="FAMILY", help="tadpole, bubble or propagator.")],
    *,
    p_squared: Annotated[
        str | None, typer.Option(metavar="NUMBER", help="p^2, any sign: 0.25, 1e-3, -1/4.")
    ] = None,
    m1_squared: Annotated[
        str | None, typer.Option(metavar="NUMBER", help="Squared mass; complex: re,im.")
    ] = None,
    m2_squared: Annotated[str | None, typer.Option(metavar="NUMBER")] = None,
    m1: Annotated[
        str | None, typer.Option("--m1", metavar="NUMBER", help="Mass, with --width1 optional.")
    ] = None,
    width1: Annotated[str | None, typer.Option("--width1", metavar="NUMBER")] = None,
    m2: Annotated[str | None, typer.Option("--m2", metavar="NUMBER")] = None,
    width2: Annotated[str | None, typer.Option("--width2", metavar="NUMBER")] = None,
    m_squared: Annotated[
        str | None, typer.Option(metavar="NUMBER", help="Squared mass of a tadpole.")
    ] = None,
    m: Annotated[str | None, typer.Option("--m", metavar="NUMBER")] = None,
    width: Annotated[str | None, typer.Option(metavar="NUMBER")] = None,
    powers: Annotated[
        str | None,
        typer.Option(
            metavar="N[,N]",
            help="Powers of the propagators (default 1); in a propagator n:a is n + a eps.",
        ),
    ] = None,
    dimension: Annotated[int, typer.Option(metavar="D0", help="d = D0 - 2 eps, 1 to 12.")] = 4,
    orders: Annotated[
        str, typer.Option(metavar="LOW,HIGH", help="Powers of epsilon, inclusive.")
    ] = "-1,0",
    derivative: Annotated[
        list[str] | None,
        typer.Option(
            metavar="NAME",
            help="Differentiate by p_squared, m1_squared, m2_squared or m_squared; repeat for a "
            "higher derivative.",
        ),
    ] = None,
    digits: Annotated[int, typer.Option(metavar="N", help="Proven digits, 5 to 2000.")] = 30,
    mu_squared: Annotated[str, typer.Option(metavar="NUMBER", help="mu^2 > 0.")] = "1",
    propagator_sign: Annotated[
        str, typer.Option(metavar="NAME", help="minkowski or euclidean.")
    ] = "minkowski",
    measure: Annotated[
        str, typer.Option(metavar="NAME", help="msbar, plain, gamma, r_gamma or two_pi.")
    ] = "msbar",
    snap_tolerance: Annotated[
        str,
        typer.Option(metavar="NUMBER", help="Move p^2 onto a threshold within this distance."),
    ] = "0",
    max_precision_bits: Annotated[
        int, typer.Option(metavar="BITS", help="Cap on the working precision.")
    ] = 20_000,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
    cross_check: Annotated[
        bool, typer.Option("--cross-check", help="Compare with an independent quadrature.")
    ] = False,
) -> None:
    """Evaluate one integral at one point."""
    from loopint.console import show_point
    from loopint.pipeline.single import evaluate_point

    result = evaluate_point(
        family,
        {
            "p_squared": p_squared,
            "m1_squared": m1_squared,
            "m1": m1,
            "width1": width1,
            "m2_squared": m2_squared,
            "m2": m2,
            "width2": width2,
            "m_squared": m_squared,
            "m": m,
            "width": width,
        },
        powers=powers,
        dimension=dimension,
        orders=orders,
        derivatives=derivative or (),
        digits=digits,
        mu_squared=mu_squared,
        propagator_sign=propagator_sign,
        measure=measure,
        max_precision_bits=max_precision_bits,
        snap_tolerance=snap_tolerance,
        check=cross_check,
    )
    if as_json:
        typer.echo(json.dumps(result.as_dict(), indent=2))
    else:
        show_point(result)
    raise typer.Exit(result.exit_code)


@app.command(
    epilog="""\b
Examples:
  loopint formula bubble
  loopint formula bubble --kinematics equal_mass --dimension 3 --format latex
  loopint formula tadpole --powers 2 --orders -1,4 --format python > tadpole.py"""
)
def formula(
    family: Annotated[str, typer.Argument(metavar="FAMILY", help="tadpole, bubble or propagator.")],
    *,
    powers: Annotated[
        str | None,
        typer.Option(
            metavar="N[,N]",
            help="Powers of the propagators (default 1); in a propagator n:a is n + a eps.",
        ),
    ] = None,
    kinematics: Annotated[
        str,
        typer.Option(
            metavar="NAME",
            help="general, equal_mass, one_massless, both_massless, zero_momentum, "
            "zero_momentum_equal_mass, zero_momentum_one_massless, threshold, pseudothreshold or "
            "on_shell.",
        ),
    ] = "general",
    dimension: Annotated[int, typer.Option(metavar="D0", help="d = D0 - 2 eps, 1 to 12.")] = 4,
    orders: Annotated[
        str, typer.Option(metavar="LOW,HIGH", help="Powers of epsilon, inclusive, at most 8.")
    ] = "-1,2",
    form: Annotated[
        str, typer.Option("--format", metavar="NAME", help="text, latex, python or sympy.")
    ] = "text",
    propagator_sign: Annotated[
        str, typer.Option(metavar="NAME", help="minkowski or euclidean.")
    ] = "minkowski",
    measure: Annotated[
        str, typer.Option(metavar="NAME", help="msbar, plain, gamma, r_gamma or two_pi.")
    ] = "msbar",
) -> None:
    """Print the closed form of an integral and its Laurent coefficients."""
    from loopint.console import show_formula
    from loopint.pipeline.single import requested_formula

    found = requested_formula(
        family,
        powers=powers,
        kinematics=kinematics,
        dimension=dimension,
        orders=orders,
        propagator_sign=propagator_sign,
        measure=measure,
    )
    show_formula(found, form)


def main() -> None:
    """Run the command line; every error becomes one sentence on stderr and exit code 2."""
    try:
        app(prog_name="loopint")
    except LoopintError as error:
        message = str(error)
    except OSError as error:
        what = error.strerror or str(error)
        message = f"{error.filename}: {what}" if error.filename else what
    except MemoryError:
        message = "out of memory; accepted: a smaller [execution] chunk_rows or fewer workers"
    typer.echo(f"loopint: {message}", err=True)
    sys.exit(UNUSABLE)


def program() -> None:
    """Run `main` in a process of its own."""
    leave_out_pandas()
    main()


if __name__ == "__main__":
    program()
