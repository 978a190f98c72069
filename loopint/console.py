"""What the commands print: tables and closing lines; results on stdout, trouble on stderr."""

from __future__ import annotations

from contextlib import contextmanager
from typing import TYPE_CHECKING

from rich import box
from rich.console import Console
from rich.markup import escape
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    ProgressColumn,
    Task,
    TextColumn,
    TimeRemainingColumn,
)
from rich.table import Table
from rich.text import Text

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence
    from pathlib import Path

    from loopint.formulas.formula import Formula
    from loopint.interpolation.build import Built
    from loopint.pipeline.estimate import Survey
    from loopint.pipeline.run import RunOutcome
    from loopint.pipeline.single import PointResult
    from loopint.pipeline.verify import Verification


def _stdout() -> Console:
    return Console(highlight=False, soft_wrap=True)


def _stderr() -> Console:
    return Console(stderr=True, highlight=False, soft_wrap=True)


class _Rate(ProgressColumn):
    """Rows per second."""

    def render(self, task: Task) -> Text:
        return Text(f"{task.speed:.0f} rows/s" if task.speed else "")


@contextmanager
def progress_bar(action: str, silent: bool = False) -> Iterator[Callable[[int, int], None] | None]:
    """Show a progress bar on stderr inside the block; None if silent or stderr is no terminal."""
    console = Console(stderr=True)
    if silent or not console.is_terminal:
        yield None
        return
    with Progress(
        TextColumn(action),
        BarColumn(),
        MofNCompleteColumn(),
        _Rate(),
        TimeRemainingColumn(),
        console=console,
        transient=True,
    ) as bar:
        task = bar.add_task(action, total=None)

        def update(done: int, total: int) -> None:
            bar.update(task, completed=done, total=total)

        yield update


def show_run(outcome: RunOutcome, report: Path | None = None) -> None:
    """Print the account of a run on stdout, and what needs attention on stderr."""
    out, summary, checks = _stdout(), outcome.summary, outcome.summary["cross_check"]
    table = Table(box=box.SIMPLE, title=escape(summary["title"]) or None, title_justify="left")
    table.add_column("integral")
    table.add_column("region")
    table.add_column("ok", justify="right")
    table.add_column("below digits", justify="right")
    for name, entry in summary["integrals"].items():
        for region, statuses in entry["regions"].items():
            below = statuses.get("below_digits", 0) + statuses.get("timed_out", 0)
            table.add_row(name, region, str(statuses.get("ok", 0)), str(below) if below else "")
    out.print(table)
    worst = summary["worst_digits"]
    proven = "all coefficients exact" if worst is None else f"at least {worst} digits proven"
    out.print(
        f"{summary['rows_in']} rows in, {summary['rows_in_table']} in the table, "
        f"{summary['rows_rejected']} rejected; {proven} ({summary['digits']} asked)"
    )
    agreed = checks["worst_agreed_digits"]
    agreement = "" if agreed is None else f", agreement to at least {agreed} digits"
    out.print(
        f"cross-check: {checks['coefficients']} coefficients, {checks['disagrees']} disagree, "
        f"{checks['inconclusive']} inconclusive{agreement}"
    )
    resumed = f" ({summary['rows_resumed']} rows were finished before)"
    out.print(
        f"{summary['elapsed_seconds']:.1f} s with {summary['workers']} worker(s)"
        f"{resumed if summary['rows_resumed'] else ''}; results in {escape(str(outcome.directory))}"
    )
    if report is not None:
        out.print(f"to look at: {escape(str(report))}")
    show_attention(outcome)


def show_attention(outcome: RunOutcome) -> None:
    """Print on stderr what needs attention after a run."""
    err, summary, checks = _stderr(), outcome.summary, outcome.summary["cross_check"]
    if summary["rows_rejected"]:
        path = outcome.directory / "rejected.parquet"
        err.print(
            f"loopint: {summary['rows_rejected']} row(s) rejected; the reasons are in "
            f"{escape(str(path))}"
        )
    if summary["results_below_digits"]:
        err.print(
            f"loopint: {summary['results_below_digits']} result(s) below {summary['digits']} "
            "digits; their status is below_digits and their bounds hold"
        )
    if summary["results_timed_out"]:
        err.print(
            f"loopint: {summary['results_timed_out']} result(s) not reached within [accuracy] "
            "time_limit; their status is timed_out"
        )
    if checks["disagrees"]:
        named = ", ".join(
            f"row {found['row']} integral {found['integral']} order {found['order']}"
            for found in checks["disagreements"]
        )
        more = checks["disagrees"] - len(checks["disagreements"])
        err.print(
            f"loopint: {checks['disagrees']} coefficient(s) fail the cross-check: {named}"
            f"{f' and {more} more' if more else ''}; see "
            f"{escape(str(outcome.directory / 'cross_check.parquet'))}"
        )


def show_survey(survey: Survey) -> None:
    """Print what `validate` found."""
    out = _stdout()
    table = Table(box=box.SIMPLE)
    table.add_column("integral")
    table.add_column("region")
    table.add_column("rows", justify="right")
    for name, regions in survey.regions.items():
        for region, count in regions.items():
            table.add_row(name, region, str(count))
    out.print(table)
    good = survey.rows - survey.rows_rejected
    out.print(
        f"{survey.rows} rows: {good} can be evaluated ({survey.table_lines} lines in the table), "
        f"{survey.rows_rejected} will be rejected"
    )
    out.print(
        f"estimated time: {_duration(survey.seconds)} with {survey.workers} worker(s): "
        f"{1000 * survey.row_seconds:.2f} ms per row, and {survey.checks} cross-check(s) of "
        f"{1000 * survey.check_seconds:.1f} ms"
    )
    show_rejections(survey)


def show_rejections(survey: Survey) -> None:
    """Print on stderr the rows that a run will reject."""
    err = _stderr()
    for rejection in survey.rejections:
        key = "" if rejection.key == rejection.row else f" (key {rejection.key})"
        err.print(
            f"loopint: row {rejection.row}{escape(key)}: integral {rejection.integral}: "
            f"{escape(rejection.reason)}"
        )
    if (more := survey.rows_rejected - len(survey.rejections)) > 0:
        err.print(f"loopint: and {more} more row(s) that will be rejected")


def show_verification(found: Verification) -> None:
    """Print what `validate` found in a run directory."""
    out = _stdout()
    out.print(f"{escape(str(found.directory))}: {found.files} files as the manifest names them")
    out.print(
        f"{found.rows} rows; {found.evaluated} evaluated again: {found.coefficients} coefficients, "
        f"{found.confirmed} confirmed by quadrature, {len(found.findings)} finding(s)"
    )
    for note in found.notes:
        out.print(f"note: {escape(note)}")
    show_findings(found)


def show_findings(found: Verification) -> None:
    """Print on stderr what is not as it should be."""
    err = _stderr()
    for finding in found.findings:
        err.print(f"loopint: {escape(str(found.directory))}: {escape(finding)}")


def _duration(seconds: float) -> str:
    if seconds < 1:
        return "less than a second"
    if seconds < 120:
        return f"{seconds:.0f} s"
    if seconds < 7200:
        return f"{seconds / 60:.0f} min"
    return f"{seconds / 3600:.1f} h"


def show_point(result: PointResult) -> None:
    """Print one integral at one point."""
    out, integral, conventions = _stdout(), result.integral, result.conventions
    kinematics = ", ".join(f"{name} = {value}" for name, value in result.kinematics.items())
    powers = ",".join(map(str, integral.powers))
    by = "".join(f"d/d({name}) " for name in integral.derivatives)
    out.print(
        f"{by}{integral.family}({powers}), d = {integral.dimension} - 2 eps: {escape(kinematics)}"
    )
    out.print(
        f"mu_squared = {conventions.mu_squared}, propagator_sign = {conventions.propagator_sign}, "
        f"measure = {conventions.measure}"
    )
    out.print(
        f"region {result.series.region}, method {result.series.method}, status "
        f"{result.series.status}"
    )
    table = Table(box=box.SIMPLE)
    for heading in ("order", "real part", "imaginary part", "|error| <=", "proven digits"):
        table.add_column(heading, justify="right", no_wrap=True, overflow="ignore")
    for c in result.coefficients:
        proven = "exact" if c.digits is None else str(c.digits)
        table.add_row(f"eps^{c.order}", c.re, c.im, c.bound, proven)
    # Numbers are never cut, however narrow the terminal.
    wide = Console(highlight=False, width=max(out.width, _width(result)))
    wide.print(table)
    for check in result.checks or ():
        if check.quadrature_re is None:
            out.print(f"cross-check eps^{check.order}: {check.status}: {escape(check.note or '')}")
            continue
        agreed = "" if check.agreed_digits is None else f", {check.agreed_digits} digits agree"
        out.print(
            f"cross-check eps^{check.order}: {check.status}: quadrature {check.quadrature_re!r} "
            f"{check.quadrature_im:+}i +/- {check.quadrature_bound:.1e}{agreed}"
        )
    if result.series.status != "ok":
        _stderr().print(
            f"loopint: below {result.series.digits} digits at {result.series.precision_bits} bits; "
            "accepted: a larger --max-precision-bits"
        )


def show_formula(formula: Formula, form: str) -> None:
    """Print a closed form exactly as it is written: its output can be run or typeset."""
    print(formula.printed(form), end="")


def show_interpolants(built: Sequence[Built]) -> None:
    """Print what was built, how certain it is, and where it is."""
    out = _stdout()
    for one in built:
        interpolant = one.interpolant
        out.print(
            f"{interpolant.name}: {escape(interpolant.integral)}, {interpolant.region}, "
            f"{interpolant.pieces} pieces of degree up to {one.degree}"
        )
        for order, bound in interpolant.error_bounds.items():
            out.print(f"  eps^{order}: |error| <= {bound:.1e} everywhere (proven)")
        out.print(f"  {', '.join(escape(str(path)) for path in one.files)}")


def _width(result: PointResult) -> int:
    return 60 + sum(
        max(len(text) for text in texts)
        for texts in zip(*((c.re, c.im) for c in result.coefficients), strict=True)
    )
