"""Where to evaluate a cross section so that its thermal average comes out right at every temperature.

Nodes lie in y, s = 4 m^2 (1 + y^2). At every x = m/T the thermal weight is one smooth bump in t = ln y, so panels of
equal length in t, each with a Gauss-Legendre rule, serve all x at once; one more panel, linear in y, reaches down to
y = 0. Around a resonance t is replaced by a hyperbolic-sine map centred on the pole in the complex plane of t, which
resolves any width. Panels end at thresholds, and the square root behind a threshold is mapped away.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

ORDER: Final = 10
NODES, WEIGHTS = np.polynomial.legendre.leggauss(ORDER)
"""Gauss-Legendre rule on [-1, 1] that every panel uses."""

LOWEST_X: Final = 1.0
"""Where histories start at the latest; the Maxwell-Boltzmann form means little at higher temperatures."""
EXPONENT: Final = 42.0
"""Nodes with x (sqrt(s) - 2 m)/m above this weigh less than 1e-18."""
_HIGHEST_U: Final = EXPONENT / LOWEST_X
_LAST_T: Final = 0.5 * math.log((0.5 * _HIGHEST_U + 1.0) ** 2 - 1.0)

# Lengths of panels, found by experiment to leave errors near 1e-7 with ten nodes.
_LONG: Final = 2.0
_SHORT: Final = 1.1
_KNEE: Final = -1.2
_SINH: Final = 4.0
_ROOT: Final = 0.6
_REACH: Final = 0.8
"""Distance in ln y over which a pole shapes the nodes."""
_WIDE: Final = 0.6
"""A pole further than this from the real axis of ln y needs no help: the thermal weight itself varies as fast."""

_LINEAR, _LOG, _POLE = 0.0, 1.0, 2.0
_KIND, _FROM, _TO, _CENTRE, _DEPTH, _IS_ROOT, _LOW, _HIGH = range(8)


@njit(cache=True, error_model="numpy")
def _sort_rows(rows: FloatArray, count: int) -> None:
    """Sort the first `count` rows by their first column; a handful of rows, so by insertion."""
    for i in range(1, count):
        for j in range(i, 0, -1):
            if rows[j - 1, 0] <= rows[j, 0]:
                break
            for column in range(rows.shape[1]):
                rows[j - 1, column], rows[j, column] = rows[j, column], rows[j - 1, column]


@njit(cache=True, error_model="numpy")
def _pole_positions(mass: float, poles: FloatArray) -> FloatArray:
    """Place of each pole in the complex plane of ln y, shape (p, 2): real part, distance from the real axis."""
    places = np.empty((len(poles), 2))
    for k in range(len(poles)):
        pole_mass, width = poles[k, 0], poles[k, 1]
        real = 0.25 * (pole_mass - 2.0 * mass) * (pole_mass + 2.0 * mass) / (mass * mass)
        imaginary = 0.25 * pole_mass * width / (mass * mass)
        places[k, 0] = 0.5 * math.log(max(math.hypot(real, imaginary), 1e-30))
        places[k, 1] = max(0.5 * math.atan2(imaginary, real), 1e-9)
    _sort_rows(places, len(places))
    return places


@njit(cache=True, error_model="numpy")
def _place_edges(
    mass: float, places: FloatArray, thresholds: FloatArray, first_t: float
) -> tuple[FloatArray, FloatArray]:
    """Ends of the stretches that share one map, and the poles that shape them.

    Returns
    -------
    edges : ndarray, shape (n, 2)
        ln y in ascending order, and 1 where a threshold lies.
    kept : ndarray, shape (q, 2)
        The rows of `places` that matter.
    """
    kept = np.empty((len(places), 2))
    edges = np.zeros((3 + 3 * len(places) + len(thresholds), 2))
    edges[0, 0], edges[1, 0], edges[2, 0] = first_t, _KNEE, _LAST_T
    count, used = 3, 0
    for k in range(len(places)):
        centre, depth = places[k, 0], places[k, 1]
        if depth < _WIDE and first_t - _REACH < centre < _LAST_T + _REACH:
            edges[count, 0] = centre - _REACH
            edges[count + 1, 0] = centre + _REACH
            count += 2
            if used > 0:
                edges[count, 0] = 0.5 * (kept[used - 1, 0] + centre)
                count += 1
            kept[used, 0], kept[used, 1] = centre, depth
            used += 1
    for threshold in thresholds:
        if threshold > 2.0 * mass:
            y2 = 0.25 * (threshold - 2.0 * mass) * (threshold + 2.0 * mass) / (mass * mass)
            edges[count, 0], edges[count, 1] = 0.5 * math.log(y2), 1.0
            count += 1
    _sort_rows(edges, count)
    return edges[:count], kept[:used]


@njit(cache=True, error_model="numpy")
def _set_panel(
    panels: FloatArray, row: int, kind: float, start: float, end: float, centre: float, depth: float, is_root: float
) -> None:
    panels[row, _KIND] = kind
    panels[row, _FROM], panels[row, _TO] = start, end
    panels[row, _CENTRE], panels[row, _DEPTH] = centre, depth
    panels[row, _IS_ROOT] = is_root
    panels[row, _LOW], panels[row, _HIGH] = 0.0, 1.0


@njit(cache=True, error_model="numpy")
def place_panels(mass: float, poles: FloatArray, thresholds: FloatArray) -> tuple[FloatArray, float]:
    """Choose the panels for one cross section.

    Parameters
    ----------
    mass : float
        GeV.
    poles : ndarray, shape (p, 2)
        Mass and width of each resonance in GeV.
    thresholds : ndarray, shape (k,)
        Values of sqrt(s) in GeV at which channels open.

    Returns
    -------
    panels : ndarray, shape (n, 8)
        In ascending order of s.
    last_x : float
        The x up to which the nodes resolve the average: at least 1e6, more when a pole lies very close to 2 m.
    """
    places = _pole_positions(mass, poles)
    first_y, last_x = 1e-3, 1e6
    for k in range(len(places)):
        distance = math.exp(places[k, 0])
        first_y = min(first_y, 0.5 * distance)
        last_x = max(last_x, 30.0 / distance**2)
    first_y, last_x = max(first_y, 1e-5), min(last_x, 1e9)
    first_t = math.log(first_y)
    edges, kept = _place_edges(mass, places, thresholds, first_t)

    panels = np.empty((16 * (len(edges) + 2), 8))
    _set_panel(panels, 0, _LINEAR, 0.0, first_y, 0.0, 0.0, 0.0)
    used = 1
    start = first_t
    is_root = 0.0
    for i in range(len(edges)):
        end = min(edges[i, 0], _LAST_T)
        if end - start > 1e-9:
            middle = 0.5 * (start + end)
            kind, length, centre, depth = _LOG, _LONG if middle < _KNEE else _SHORT, 0.0, 0.0
            low, high = start, end
            nearest = _REACH
            for k in range(len(kept)):
                if abs(middle - kept[k, 0]) < nearest:
                    nearest = abs(middle - kept[k, 0])
                    kind, length, centre, depth = _POLE, _SINH, kept[k, 0], kept[k, 1]
            if kind == _POLE:
                low, high = math.asinh((start - centre) / depth), math.asinh((end - centre) / depth)
            if is_root > 0.0:
                stop = min(high, low + _ROOT)
                _set_panel(panels, used, kind, low, stop, centre, depth, 1.0)
                used += 1
                low = stop
            pieces = math.ceil((high - low) / length - 1e-9)
            for piece in range(pieces):
                a = low + (high - low) * piece / pieces
                b = low + (high - low) * (piece + 1) / pieces
                _set_panel(panels, used, kind, a, b, centre, depth, 0.0)
                used += 1
            start, is_root = end, 0.0
        if edges[i, 0] > first_t:
            is_root = max(is_root, edges[i, 1])
    return panels[:used].copy(), last_x


@njit(cache=True, error_model="numpy")
def place_nodes(mass: float, panels: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Nodes of all panels, ascending.

    Returns
    -------
    s : ndarray, shape (n,)
        GeV^2.
    y : ndarray, shape (n,)
    weight : ndarray, shape (n,)
        Weight in dy times 4 y^2 (1 + y^2).
    """
    size = len(panels) * ORDER
    s, y, weight = np.empty(size), np.empty(size), np.empty(size)
    i = 0
    for panel in panels:
        half = 0.5 * (panel[_HIGH] - panel[_LOW])
        span = panel[_TO] - panel[_FROM]
        for k in range(ORDER):
            place = panel[_LOW] + half * (1.0 + NODES[k])
            jacobian = half * WEIGHTS[k] * span
            if panel[_IS_ROOT] > 0.0:
                jacobian *= 2.0 * place
                place *= place
            place = panel[_FROM] + span * place
            if panel[_KIND] == _LINEAR:
                y[i] = place
            else:
                if panel[_KIND] == _POLE:
                    growth = math.exp(place)
                    jacobian *= 0.5 * panel[_DEPTH] * (growth + 1.0 / growth)
                    place = panel[_CENTRE] + 0.5 * panel[_DEPTH] * (growth - 1.0 / growth)
                y[i] = math.exp(place)
                jacobian *= y[i]
            y2 = y[i] * y[i]
            s[i] = 4.0 * mass * mass * (1.0 + y2)
            weight[i] = jacobian * 4.0 * y2 * (1.0 + y2)
            i += 1
    return s, y, weight


@njit(cache=True, error_model="numpy")
def halve(panels: FloatArray, errors: FloatArray, limit: float) -> FloatArray:
    """Split every panel whose error exceeds `limit` in two."""
    result = np.empty((2 * len(panels), 8))
    used = 0
    for i in range(len(panels)):
        result[used] = panels[i]
        if errors[i] > limit:
            middle = 0.5 * (panels[i, _LOW] + panels[i, _HIGH])
            result[used, _HIGH] = middle
            used += 1
            result[used] = panels[i]
            result[used, _LOW] = middle
        used += 1
    return result[:used].copy()
