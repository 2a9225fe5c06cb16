"""Draw every figure of a run and say in words what each shows."""

from __future__ import annotations

from collections.abc import Sequence

from scanfit.statistics.decides import DECISIVE
from scanfit.statistics.profile import CAVEAT

from ..convergence import draw_convergence
from ..corner import corner_data, draw_corner
from ..decides import DecidesData, decides_data, draw_decides
from ..marginals import draw_marginals, marginal_data
from ..material import Material, Picture, save
from ..planes import draw_plane, plane_data
from ..style import figure_style
from .symbols import plain_text


def draw_all(material: Material) -> dict[str, list[Picture]]:
    """Write all figures of a run.

    Parameters
    ----------
    material : Material
        The run.

    Returns
    -------
    dict of str to list of Picture
        Under "planes", "decides", "marginals", "corner" and "convergence"; empty where there was nothing to draw.
    """
    with figure_style():
        return {
            "planes": [picture for x, y in _drawable(material) for picture in _plane(material, x, y)],
            "decides": [picture for x, y in _drawable(material) for picture in _decides(material, x, y)],
            "marginals": _marginals(material),
            "corner": _corner(material),
            "convergence": [picture for name in material.run.explorers for picture in _convergence(material, name)],
        }


def _drawable(material: Material) -> list[tuple[str, str]]:
    """Planes whose axes are free parameters or derived quantities; a fixed parameter has no axis."""
    return [(x, y) for x, y in material.run.planes if x in material.axes and y in material.axes]


def _names(material: Material, x: str, y: str) -> str:
    return f"{plain_text(material.axes[y].label)} against {plain_text(material.axes[x].label)}"


def _values(pair: Sequence[float]) -> str:
    return " and ".join(f"{value:.3g}" for value in pair)


def _plane(material: Material, x: str, y: str) -> list[Picture]:
    data = plane_data(material, x, y)
    if data is None:
        return []
    where = _names(material, x, y)
    others = f" Dashed green: the same regions from {', '.join(data.others)}." if data.others else ""
    alt = (
        f"{where}: posterior credible regions on the left, profile likelihood on the right. Best fit at "
        f"{_values(data.best_fit)}, posterior mean at {_values(data.mean)} (horizontal and vertical)."
    )
    caption = (
        "Left: regions of highest posterior density that hold 68.27 and 95.45 % of the posterior "
        f"({material.run.explorers[0]}).{others} Right: 2 ln L below the best fit; lines at 2.30 and 6.18, the "
        "asymptotic 68.27 and 95.45 % regions for two parameters. The mean is taken on the scale of the axes. " + CAVEAT
    )
    return [save(draw_plane(data, material.footnote), material.run.folder, f"plane_{x}_{y}", alt, caption)]


def _decides(material: Material, x: str, y: str) -> list[Picture]:
    data = decides_data(material, x, y)
    if data is None:
        return []
    caption = (
        "At the best archived point of each cell, the term whose log-likelihood lies furthest below the best that it "
        f"reaches anywhere; grey where no term lies more than {DECISIVE:g} below its best. This is the strongest "
        "objection to a cell; it does not say that the cell would be allowed without that search. Outside the outlined "
        "posterior few points were evaluated, so that borders there are rough."
    )
    alt = f"Which search decides, {_names(material, x, y)}. Share of the explored cells: {_shares(data)}."
    return [save(draw_decides(data, material.footnote), material.run.folder, f"decides_{x}_{y}", alt, caption)]


def _shares(data: DecidesData) -> str:
    shares = [f"{term} {100 * data.share(code):.0f} %" for code, term in enumerate(data.decisions.terms)]
    return ", ".join([*shares, f"nothing {100 * data.share(-1):.0f} %"])


def _marginals(material: Material) -> list[Picture]:
    run = material.run
    names = [*run.model_names, *(name for name in run.free_names if name not in run.model_names)]
    panels = marginal_data(material, names)
    if not panels:
        return []
    alt = "Posterior density, profile likelihood and prior of each free parameter: " + "; ".join(
        f"{plain_text(panel.axis.label)}, best fit {panel.best_fit:.3g}" for panel in panels
    )
    caption = (
        "Posterior density with its 68 and 95 % parts, and profile likelihood, each relative to its maximum; the prior "
        "density is on the posterior's scale. Where the two curves differ, prior volume matters. Measurements behind "
        "the priors of nuisances count in the profile likelihood. " + CAVEAT
    )
    return [save(draw_marginals(panels, material.footnote), run.folder, "marginals", alt, caption)]


def _corner(material: Material) -> list[Picture]:
    data = corner_data(material)
    if data is None:
        return []
    left_out = f" Not shown: {', '.join(data.left_out)}." if data.left_out else ""
    caption = f"Posterior of the free parameters, 68 and 95 % regions; lines mark the best fit.{left_out}"
    alt = "Corner plot of the posterior of " + ", ".join(name.replace("_", " ") for name in data.names) + "."
    return [save(draw_corner(data, material.footnote), material.run.folder, "corner", alt, caption)]


def _convergence(material: Material, explorer: str) -> list[Picture]:
    figure = draw_convergence(material.run.history(explorer), material.footnote)
    if figure is None:
        return []
    verdict = material.run.summary["explorers"][explorer]["verdict"]
    alt = f"Convergence curves of {explorer}. {verdict}"
    return [save(figure, material.run.folder, f"convergence_{explorer}", alt, f"{explorer}: {verdict}")]
