"""Draw docs/halo_limits.png: what uncertain halo speeds do to a limit.

Run it from the repository: ``python docs/halo_limits.py``.

The speed v_0 varies by 238 +- 15 km/s, taking the Earth's speed along (v_E = v_0 + 14 km/s), and the escape speed by
544 +- 35 km/s, which is the interval 498 to 608 km/s at 90 % of Mon. Not. R. Astron. Soc. 379 (2007) 755 (from memory);
the spread of v_0 is a choice that covers old and new conventions. The density is held at 0.3 GeV/cm^3, since it moves
limits by the same factor at all masses.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from scipy.optimize import brentq

from scanfit.contracts import BuildContext
from scanfit.likelihoods.direct_detection.halo import Halo
from scanfit.likelihoods.direct_detection.sensitivity import couplings_of
from scanfit.likelihoods.direct_detection.term import DirectDetection
from scanfit.plotting.style import COLOURS, FULL_WIDTH, figure_style, new_figure
from scanfit.priors import FloatArray

HERE = Path(__file__).parent
FALL = 0.5 * 1.6424
"""Fall of ln L at a one-sided 90 % limit."""
WIDE = [(x, y) for x in np.linspace(-3.5, 3.5, 15) for y in np.linspace(-3.5, 3.5, 15)]
"""Pulls to integrate over: the trapezium rule on a normal density is exact to 1e-6."""
NEAR = [(x, y) for x in np.linspace(-1.4, 1.4, 41) for y in np.linspace(-1.4, 1.4, 41)]
"""Pulls to maximise over: a pull beyond 1.28 costs more than the limit's fall of ln L."""
MASSES = np.geomspace(6.5, 60.0, 28)
UNIT = 1e-45


def halo(first: float, second: float) -> Halo:
    """Halo whose v_0 and escape speed are off by these numbers of standard deviations."""
    speed = 238.0 + 15.0 * first
    return Halo(0.3, speed, 544.0 + 35.0 * second, speed + 14.0)


def limits(term: DirectDetection, mass: float) -> tuple[float, float, float]:
    """Limits in cm^2 with the halo fixed, marginalised and profiled; one rule for all three."""
    response, counting = term.response, term.counting
    nucleon = couplings_of("si", mass, UNIT)
    fixed = response.counts(mass, nucleon, Halo())
    wide, near = (np.array([response.counts(mass, nucleon, halo(x, y)) for x, y in pairs]) for pairs in (WIDE, NEAR))
    weights, penalties = np.exp(_log_prior(WIDE)), _log_prior(NEAR)

    def log_likelihoods(strength: float, rows: FloatArray) -> FloatArray:
        return np.array([counting.log_likelihood(strength * row) for row in rows])

    zero = counting.log_likelihood(np.zeros_like(fixed))
    rules = (
        lambda s: counting.log_likelihood(s * fixed),
        lambda s: float(np.log(weights @ np.exp(log_likelihoods(s, wide) - zero) / weights.sum()) + zero),
        lambda s: float(np.max(log_likelihoods(s, near) + penalties)),
    )
    found = []
    for rule in rules:
        # The data hold no excess: ln L falls from zero signal on.
        end = 10.0 / fixed.sum()
        while rule(end) > rule(0.0) - FALL:
            end *= 2.0
        found.append(UNIT * brentq(lambda s, rule=rule: rule(s) - rule(0.0) + FALL, 0.0, end, xtol=1e-6 * end))
    return found[0], found[1], found[2]


def _log_prior(pairs: list[tuple[float, float]]) -> FloatArray:
    return np.array([-0.5 * (x * x + y * y) for x, y in pairs])


def main() -> None:
    """Compute and draw."""
    term = DirectDetection(
        DirectDetection.Options(data="corrie_xenon.toml"), BuildContext(HERE.parent / "runs" / "demo")
    )
    fixed, marginal, profiled = np.array([limits(term, float(mass)) for mass in MASSES]).T
    with figure_style():
        figure = new_figure(FULL_WIDTH, 3.6, "Invented data (Corrie chamber); likelihood-ratio limits at 90 %")
        left, right = figure.subplots(1, 2)
        for values, colour, line, label in (
            (fixed, COLOURS["mark"], "-", "halo fixed"),
            (marginal, COLOURS["posterior"], "--", "halo marginalised"),
            (profiled, COLOURS["profile"], "-.", "halo profiled"),
        ):
            left.loglog(MASSES, values, color=colour, linestyle=line, label=label)
            right.semilogx(MASSES, values / fixed, color=colour, linestyle=line)
        left.set(xlabel="$m$ [GeV]", ylabel=r"$\sigma^\mathrm{SI}_p$ [cm²]", title="Limit", xlim=MASSES[[0, -1]])
        right.set(xlabel="$m$ [GeV]", title="Limit over that of the fixed halo", xlim=MASSES[[0, -1]])
        for axes in (left, right):
            axes.set_xticks([7, 10, 20, 30, 50], ["7", "10", "20", "30", "50"])
            axes.minorticks_off()
        left.legend()
        figure.savefig(HERE / "halo_limits.png")
    for row in zip(MASSES, fixed, marginal / fixed, profiled / fixed, strict=True):
        print("{:6.2f} GeV {:.2e} cm^2  marginal {:.3f}  profiled {:.3f}".format(*row))


if __name__ == "__main__":
    main()
