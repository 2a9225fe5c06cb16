"""The figure of upper limits: what is infinite, and what is written on it."""

from __future__ import annotations

import numpy as np

from scanfit.contracts import LimitCurve, Quantity
from scanfit.plotting.limit import draw_limit, limit_figure
from scanfit.plotting.style import figure_style


def curve(observed: np.ndarray, bands: np.ndarray | None, title: str = "Some search (invented)") -> LimitCurve:
    x = np.geomspace(100.0, 1000.0, len(observed))
    mass, coupling = Quantity("mediator_mass", "GeV", "M"), Quantity("g_quark", "", "g_q")
    return LimitCurve(title, mass, coupling, 0.95, x, observed, bands, ("invented data", "long " * 60))


def test_infinite_limits_leave_the_figure_at_its_top_and_stretch_no_axis(tmp_path):
    bands = np.outer([0.1, 0.2, 0.4], [0.5, 0.7, 1.0, 1.5, 2.0])
    bands[2, 3:] = np.inf
    made = limit_figure(curve(np.array([0.1, 0.2, np.inf]), bands))
    axes = made.axes[0]
    np.testing.assert_allclose(axes.get_ylim(), (0.6 * 0.05, 1.6 * 0.4))
    for band in axes.collections:
        vertices = band.get_paths()[0].vertices
        assert np.isfinite(vertices).all()
        assert vertices[:, 1].max() > axes.get_ylim()[1]
    paths = draw_limit(curve(np.full(3, np.inf), np.full((3, 5), np.inf)), tmp_path / "blind")
    assert all(path.stat().st_size > 0 for path in paths)


def test_every_word_lies_within_the_figure():
    with figure_style():
        made = limit_figure(curve(np.array([0.1, 0.2]), None, f"Some search (invented): {'many words ' * 9}"))
        made.draw_without_rendering()
        frame = made.bbox
        boxes = [text.get_window_extent() for text in (*made.texts, made.axes[0].title)]
    assert len(made.texts) == 4
    assert all(frame.x0 <= box.x0 and box.x1 <= frame.x1 and box.y1 <= frame.y1 for box in boxes)
