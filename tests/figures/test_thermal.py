"""The thermal history of a real candidate: what it tells, and what its figure shows."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from scanfit.cli.main import main
from scanfit.contracts import Detail, Detailed
from scanfit.likelihoods.candidate import Annihilation, Candidate
from scanfit.likelihoods.relic_abundance.cross_sections import constant_average
from scanfit.plotting.style import figure_style
from scanfit.plotting.thermal import draw_thermal, thermal_figure

RUN = Path(__file__).parents[2] / "runs" / "scalar_singlet.toml"


def candidate(self_conjugate: bool = True, shift: float = 0.0) -> Candidate:
    return Candidate(
        mass=100.0,
        self_conjugate=self_conjugate,
        spin_degrees_of_freedom=2,
        annihilation=constant_average(mass=100.0, sigma_v=2.2e-26),
        equation_of_state_shift=shift,
    )


def numbers(detail: Detail) -> dict[str, float]:
    return {quantity.name: value for quantity, value in detail.numbers}


def test_the_numbers_of_a_history() -> None:
    """Independent abundances for 100 GeV and 2.2e-26 cm^3/s with the three plasmas: 0.11494, 0.11308, 0.11044."""
    own = candidate()
    assert isinstance(own, Detailed)
    assert tuple(own.details) == ("thermal",)
    found = numbers(own.detail("thermal"))
    assert found["omega_h2"] == own.omega_h2
    spread = [found[f"omega_h2_arxiv-{number}"] for number in ("1803.01038", "1606.07494", "0910.1066")]
    assert spread == pytest.approx([0.11494, 0.11308, 0.11044], rel=1.5e-3)
    assert found["freeze_out_temperature"] == pytest.approx(100.0 / found["x_freeze_out"])
    assert found["sigma_v_freeze_out"] == pytest.approx(2.2e-26, rel=1e-5)
    assert found["unitarity_bound"] > 1e-21


def test_the_curves_of_a_history() -> None:
    detail = candidate().detail("thermal")
    curves = {quantity.name: values for quantity, values in detail.curves}
    assert list(curves) == ["x", "temperature", "sigma_v", "yield", "equilibrium_yield"]
    np.testing.assert_allclose(curves["temperature"] * curves["x"], 100.0)
    assert numbers(detail)["omega_h2"] == pytest.approx(2.7438e8 * 100.0 * curves["yield"][-1], rel=5e-4)
    printed = curves["x"][list(detail.rows)]
    assert printed[0] == 1.0
    assert printed[-1] == curves["x"][-1]
    assert np.sum((printed > 15.0) & (printed < 30.0)) >= 6


def test_notes_say_what_was_assumed() -> None:
    assert "antiparticle; half" in " ".join(candidate(self_conjugate=False).detail("thermal").notes)
    assert "blended" in candidate(shift=0.5).detail("thermal").notes[0]


def test_no_history_without_an_abundance() -> None:
    nothing = Annihilation(("bb",), lambda s: np.full((1, len(s)), np.nan), lambda s: np.full(len(s), np.nan))
    broken = Candidate(mass=100.0, self_conjugate=True, spin_degrees_of_freedom=2, annihilation=nothing)
    detail = broken.detail("thermal")
    assert detail.curves == ()
    assert "could not be computed" in detail.notes[0]


def test_the_figure_shows_the_history() -> None:
    detail = candidate().detail("thermal")
    curves = {quantity.name: values for quantity, values in detail.curves}
    shown = curves["x"] <= 1e4
    with figure_style():
        upper, lower = thermal_figure(detail).axes
    np.testing.assert_array_equal(upper.lines[0].get_ydata(), curves["yield"][shown])
    np.testing.assert_array_equal(lower.lines[0].get_ydata(), curves["sigma_v"][shown])
    marked = upper.lines[2].get_xdata()
    np.testing.assert_allclose(np.asarray(marked), numbers(detail)["x_freeze_out"])
    assert upper.get_yscale() == "log"
    assert lower.get_ylim()[0] == 0.0  # a constant average is shown from zero
    assert lower.get_xlabel() == "$x = m/T$"


def test_both_formats_are_written(tmp_path: Path) -> None:
    files = draw_thermal(candidate().detail("thermal"), tmp_path / "thermal.history")
    assert [file.name for file in files] == ["thermal.history.png", "thermal.history.pdf"]
    assert all(file.stat().st_size > 5000 for file in files)


def test_the_command_writes_table_and_figure(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    arguments = ["point", str(RUN), "mass=57", "portal=1e-3", "--show", "thermal", "--out", str(tmp_path), "--json"]
    with pytest.raises(SystemExit) as caught:
        main(arguments)
    assert caught.value.code == 0
    found = json.loads(capsys.readouterr().out)
    assert found["details"]["thermal"]["numbers"]["omega_h2"]["value"] == found["derived"]["omega_h2"]
    assert sorted(file.name for file in tmp_path.iterdir()) == ["thermal.csv", "thermal.pdf", "thermal.png"]
