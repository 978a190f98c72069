"""Puts the page together."""

from __future__ import annotations

from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING, Any

import jinja2
from markupsafe import Markup

from loopint.pipeline.run_directory import replacing
from loopint.report.run_data import RunData, load_run

if TYPE_CHECKING:
    from collections.abc import Mapping

MOST_FIGURES = 12
MEASURES = {
    "msbar": "N(ε) = exp(γ_E ε)",
    "plain": "N(ε) = 1",
    "gamma": "N(ε) = 1/Γ(1+ε)",
    "r_gamma": "N(ε) = Γ(1−2ε)/(Γ(1+ε) Γ(1−ε)²)",
    "two_pi": "∫ d^dq/(i (2π)^d), N(ε) = 1",
}
SIGNS = {"minkowski": "1/(q² − m² + i0)", "euclidean": "1/(m² − q² − i0)"}
KINEMATICS = (
    *("p_squared", "m_squared", "m", "width"),
    *("m1_squared", "m1", "width1", "m2_squared", "m2", "width2"),
)
SOURCES = (
    "Gauss hypergeometric function: DLMF chapter 15",
    "E. Boos, A. Davydychev, Theor. Math. Phys. 89 (1991) 1052",
    "A. Davydychev, hep-ph/9910224",
    "K. Chetyrkin, F. Tkachov, Nucl. Phys. B192 (1981) 159",
    "O. Tarasov, hep-th/9606018",
    "G. 't Hooft, M. Veltman, Nucl. Phys. B153 (1979) 365",
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
        coefficient_figure,
    )

    config = data.manifest["config"]
    figures = []
    for one in data.integrals[:MOST_FIGURES]:
        if data.sampled_rows.size:
            svg, caption = "", "the same in every row"
            if not one.is_constant:
                svg, caption = coefficient_figure(one, data.sampled_rows)
            figures.append({"name": one.name, "svg": Markup(svg), "caption": caption})
    has_bounds = any(c.decades for i in data.integrals for c in i.coefficients.values())
    asked = int(config["cross_check"]["digits"])
    environment = jinja2.Environment(
        autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    source = resources.files("loopint.report").joinpath("page.html.jinja").read_text("utf-8")
    return environment.from_string(source).render(
        data=data,
        summary=data.summary,
        manifest=data.manifest,
        config=config,
        figures=figures,
        hidden=len(data.integrals) - len(data.integrals[:MOST_FIGURES]),
        bounds=Markup(bound_figure(data)) if has_bounds else "",
        agreement=Markup(agreement_figure(data, asked)) if data.agreed else "",
        measure=MEASURES[config["conventions"]["measure"]],
        propagator=SIGNS[config["conventions"]["propagator_sign"]],
        regions=list(_regions(data.summary)),
        integrals=[_described(entry) for entry in config["integral"]],
        sources=SOURCES,
        key=config["points"].get("key") or "row",
        title=data.summary["title"] or data.directory.name,
    )


def _regions(summary: Mapping[str, Any]) -> Any:  # noqa: ANN401 - rows of a table
    for name, entry in summary["integrals"].items():
        for region, statuses in entry["regions"].items():
            yield name, region, statuses.get("ok", 0), statuses.get("below_digits", 0)


def _described(entry: Mapping[str, Any]) -> dict[str, str]:
    """Write an entry of the config as a reader of the page wants it."""
    kinematics = ", ".join(f"{key} = {_plain(entry[key])}" for key in KINEMATICS if key in entry)
    powers = ", ".join(_plain(power) for power in entry["powers"])
    derivatives = "; ".join(", ".join(names) for names in entry.get("derivatives", []))
    return {
        "name": entry["name"],
        "integral": f"{entry['family']} ({powers}), d = {entry['dimension']} − 2ε",
        "orders": "ε^{} to ε^{}".format(*entry["orders"]),
        "kinematics": kinematics,
        "derivatives": derivatives,
    }


def _plain(value: Any) -> str:  # noqa: ANN401 - JSON
    if isinstance(value, list):
        return f"[{', '.join(map(str, value))}]"
    return str(value)
