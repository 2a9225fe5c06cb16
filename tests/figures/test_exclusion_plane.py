"""The plane that one search alone excludes: what the figure says."""

from __future__ import annotations

import numpy as np
import pytest

from scanfit.contracts import ExclusionPlane, Quantity
from scanfit.plotting import exclusion_plane as drawing
from scanfit.plotting.exclusion_plane import draw_exclusion_plane
from scanfit.plotting.style import new_figure


def plane(observed: np.ndarray, title="Brackwater ring (invented)") -> ExclusionPlane:
    return ExclusionPlane(
        title=title,
        fixed="vector couplings, g_quark = 0.25",
        x=Quantity("mediator_mass", "GeV", "M", "mediator mass"),
        y=Quantity("mass", "GeV", r"m_\chi", "dark-matter mass"),
        x_values=np.linspace(100.0, 2000.0, 12),
        y_values=np.linspace(10.0, 900.0, 10),
        observed=observed,
        expected=observed**0.8,
        caveats=("a caveat: invented data",),
    )


@pytest.fixture
def confidence() -> np.ndarray:
    x, y = np.meshgrid(np.linspace(0.0, 2.0, 12), np.linspace(0.0, 1.0, 10))
    return np.exp(-8.0 * (1.6 - x - y).clip(0.0))


def figures(monkeypatch) -> list:
    made = []
    monkeypatch.setattr(drawing, "new_figure", lambda *a, **k: made.append(new_figure(*a, **k)) or made[-1])
    return made


def test_the_figure_is_written_and_says_what_it_shows(tmp_path, monkeypatch, confidence):
    made = figures(monkeypatch)
    paths = draw_exclusion_plane(plane(confidence), tmp_path / "plane")
    assert [path.suffix for path in paths] == [".png", ".pdf"]
    assert all(path.stat().st_size > 0 for path in paths)
    text = [t.get_text() for t in made[0].texts]
    assert sorted(text) == ["CLs of this search alone; vector couplings, g_quark = 0.25", "a caveat: invented data"]
    legend = made[0].axes[0].get_legend()
    assert [t.get_text() for t in legend.get_texts()] == ["observed", "expected, median"]
    assert legend.get_title().get_text() == "excluded at 95 %"


def test_a_plane_without_a_line_says_so_and_gaps_are_hatched(tmp_path, monkeypatch, confidence):
    made = figures(monkeypatch)
    draw_exclusion_plane(plane(np.full_like(confidence, 0.5)), tmp_path / "none")
    assert "nothing on this plane is excluded at 95 %" in [t.get_text() for t in made[0].axes[0].texts]
    draw_exclusion_plane(plane(np.full_like(confidence, 0.001)), tmp_path / "all")
    assert "everything on this plane is excluded at 95 %" in [t.get_text() for t in made[1].axes[0].texts]
    draw_exclusion_plane(plane(np.full_like(confidence, np.nan)), tmp_path / "refused")
    made.pop()
    confidence[:, :3] = np.nan
    draw_exclusion_plane(plane(confidence), tmp_path / "gaps")
    assert "not covered" in [t.get_text() for t in made[2].axes[0].get_legend().get_texts()]
