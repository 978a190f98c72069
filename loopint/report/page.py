"""Puts the page together."""

from __future__ import annotations

from importlib import resources
from typing import TYPE_CHECKING, Any

import jinja2
from markupsafe import Markup

from loopint.pipeline.run_directory import replacing
from loopint.report.run_data import RunData, load_run

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping
    from pathlib import Path

    from loopint.report.plots import Drawn

MOST_FIGURES = 12
FLOAT_DIGITS = 17
# Markup: these texts are HTML, everything else is escaped.
MEASURES = {
    "msbar": Markup("N(ε) = exp(γ<sub>E</sub> ε)"),
    "plain": Markup("N(ε) = 1"),
    "gamma": Markup("N(ε) = 1/Γ(1+ε)"),
    "r_gamma": Markup("N(ε) = Γ(1−2ε) / (Γ(1+ε) Γ(1−ε)²)"),
    "two_pi": Markup("no further factor"),
}
INTEGRATION = Markup("N(ε) (μ²)<sup>ε</sup> ∫ d<sup>d</sup>q/(i π<sup>d/2</sup>)")
TWO_PI_INTEGRATION = Markup("(μ²)<sup>ε</sup> ∫ d<sup>d</sup>q/(i (2π)<sup>d</sup>)")
LINES = {
    "minkowski": Markup("[{momentum}² − m{n}² + i0]"),
    "euclidean": Markup("[m{n}² − {momentum}² − i0]"),
}
KINEMATICS = (
    *("p_squared", "m_squared", "m", "width"),
    *("m1_squared", "m1", "width1", "m2_squared", "m2", "width2"),
)
GAUSS = "Gauss hypergeometric function: DLMF chapter 15"
TWO_MASSES = (
    "G. 't Hooft, M. Veltman, Nucl. Phys. B153 (1979) 365",
    "A. Davydychev, hep-ph/9910224",
)
ONE_MASS = "E. Boos, A. Davydychev, Theor. Math. Phys. 89 (1991) 1052"
RECURRENCES = (
    "K. Chetyrkin, F. Tkachov, Nucl. Phys. B192 (1981) 159",
    "O. Tarasov, hep-th/9606018",
)


def write_report(directory: Path) -> Path:
    """Write `report.html` into the directory of a finished run and return its path.

    Everything on the page comes from the files of the run; the same files give the same page.

    Raises
    ------
    ReportError
        If the directory is not that of a finished run.
    """
    page = render(load_run(directory))
    path = directory / "report.html"
    with replacing(path) as temporary:
        temporary.write_text(page, encoding="utf-8")
    return path


def render(data: RunData) -> str:
    """Return the page."""
    from loopint.report.plots import (  # noqa: PLC0415 - matplotlib is slow to import
        agreement_figure,
        bound_figure,
        order_text,
    )

    config, bounds = data.manifest["config"], data.table.bounds
    asked = int(config["cross_check"]["digits"])
    environment = jinja2.Environment(
        autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    environment.filters["count"] = "{:,}".format
    environment.filters["order"] = order_text
    source = resources.files("loopint.report").joinpath("page.html.jinja").read_text("utf-8")
    return environment.from_string(source).render(
        data=data,
        summary=data.summary,
        manifest=data.manifest,
        config=config,
        figures=[(name, Markup(f.svg), f.caption) for name, f in _figures(data)],
        hidden=max(0, len(data.table.coefficients) - MOST_FIGURES),
        bounds=Markup(bound_figure(bounds, data.summary["digits"])) if bounds else "",
        agreement=Markup(agreement_figure(data.checks.agreed, asked)) if data.checks.agreed else "",
        formulas=_formulas(config),
        measure=MEASURES[config["conventions"]["measure"]],
        regions=list(_regions(data.summary)),
        integrals=[_described(entry, order_text) for entry in config["integral"]],
        sources=_sources(config),
        key=config["points"].get("key") or "row",
        title=data.summary["title"] or data.directory.name,
        has_decimals=data.summary["digits"] > FLOAT_DIGITS,
    )


def _sources(config: Mapping[str, Any]) -> list[str]:
    """Return the publications that the integrals of the run rest on."""
    entries = [entry for entry in config["integral"] if entry["family"] != "tadpole"]
    found = [GAUSS] if entries else ["Gamma function: DLMF chapter 5"]
    if any(entry["family"] == "bubble" for entry in entries):
        found += TWO_MASSES
    if any(entry["family"] == "propagator" for entry in entries):
        found.append(ONE_MASS)
    if any(
        entry["powers"] != [1, 1] or entry["dimension"] != 4 or entry.get("derivatives")
        for entry in entries
    ):
        found += RECURRENCES
    return found


def _figures(data: RunData) -> Iterator[tuple[str, Drawn]]:
    from loopint.report.plots import coefficient_figure  # noqa: PLC0415

    if data.sampled_rows.size:
        for name, coefficients in list(data.table.coefficients.items())[:MOST_FIGURES]:
            scan = data.scans.get(name)
            yield name, coefficient_figure(name, coefficients, data.sampled_rows, scan)


def _formulas(config: Mapping[str, Any]) -> list[Markup]:
    """Define the integrals of the run."""
    conventions = config["conventions"]
    line = LINES[conventions["propagator_sign"]]
    is_two_pi = conventions["measure"] == "two_pi"
    integration = TWO_PI_INTEGRATION if is_two_pi else INTEGRATION
    families = {entry["family"] for entry in config["integral"]}
    found = []
    if families - {"tadpole"}:
        first = line.format(momentum="q", n=Markup("<sub>1</sub>"))
        second = line.format(momentum="(q+p)", n=Markup("<sub>2</sub>"))
        found.append(
            Markup("B(n<sub>1</sub>, n<sub>2</sub>) = {} {}<sup>−n₁</sup> {}<sup>−n₂</sup>").format(
                integration, first, second
            )
        )
    if "tadpole" in families:
        one = line.format(momentum="q", n="")
        found.append(Markup("A(n) = {} {}<sup>−n</sup>").format(integration, one))
    return found


def _regions(summary: Mapping[str, Any]) -> Iterator[tuple[str, str, int, int]]:
    for name, entry in summary["integrals"].items():
        for region, statuses in entry["regions"].items():
            below = statuses.get("below_digits", 0) + statuses.get("timed_out", 0)
            yield name, region, statuses.get("ok", 0), below


def _described(entry: Mapping[str, Any], order_text: Any) -> dict[str, str]:  # noqa: ANN401
    """Write an entry of the config as a reader of the page wants it."""
    kinematics = ", ".join(f"{key} = {_plain(entry[key])}" for key in KINEMATICS if key in entry)
    powers = ", ".join(_plain(power) for power in entry["powers"])
    derivatives = "; ".join(", ".join(names) for names in entry.get("derivatives", []))
    low, high = entry["orders"]
    return {
        "name": entry["name"],
        "integral": f"{entry['family']} ({powers}), d = {entry['dimension']} − 2ε",
        "orders": order_text(low) if low == high else f"{order_text(low)} to {order_text(high)}",
        "kinematics": kinematics,
        "derivatives": derivatives,
    }


def _plain(value: Any) -> str:  # noqa: ANN401 - JSON
    if isinstance(value, list):
        return f"[{', '.join(map(str, value))}]"
    return str(value)
