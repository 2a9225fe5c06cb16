"""The page: what a reader must find on it, and that it needs nothing from outside."""

import json
import re
import shutil
from html.parser import HTMLParser

import pytest
from synthetic_run import INVENTED, write_run

from scanfit.errors import RunFolderError
from scanfit.plotting.material import Material
from scanfit.plotting.report import numbers
from scanfit.plotting.report.build import build_report, caveats, render
from scanfit.plotting.report.symbols import plain_text, rich_text
from scanfit.statistics.profile import CAVEAT


class Page(HTMLParser):
    """Text, images and tags of a page; complains about tags that do not match."""

    VOID = frozenset({"meta", "img", "br", "path"})

    def __init__(self, source):
        super().__init__()
        self.open, self.text, self.images, self.tags = [], [], [], set()
        self.feed(source)

    def handle_starttag(self, tag, attributes):
        self.tags.add(tag)
        if tag == "img":
            self.images.append(dict(attributes))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attributes):
        self.tags.add(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open and self.open[-1] != "style":
            self.text.append(data)

    @property
    def words(self):
        return re.sub(r"\s+", " ", " ".join(self.text))


@pytest.fixture(scope="module")
def built(synthetic_folder, tmp_path_factory):
    folder = tmp_path_factory.mktemp("report") / "run"
    shutil.copytree(synthetic_folder, folder)
    return folder, build_report(folder)


@pytest.fixture(scope="module")
def page(built):
    return Page((built[0] / "report.html").read_text(encoding="utf-8"))


def test_every_file_is_there(built):
    folder, written = built
    assert written[0] == folder / "report.html"
    names = {path.name for path in written[1:]}
    expected = {"plane_mass_coupling", "plane_mass_sigma_si_proton", "decides_mass_coupling",
                "decides_mass_sigma_si_proton", "marginals", "corner", "convergence_nested",
                "convergence_ensemble"}  # fmt: skip
    assert names == {f"{name}.{suffix}" for name in expected for suffix in ("png", "pdf")}
    for path in written[1:]:
        assert path.read_bytes()[:4] in (b"\x89PNG", b"%PDF")


def test_page_is_well_formed_and_self_contained(built, page):
    source = (built[0] / "report.html").read_text(encoding="utf-8")
    assert page.open == []
    assert page.tags.isdisjoint({"script", "link", "iframe", "object", "embed"})
    assert "http:" not in source
    assert "https:" not in source
    assert not re.search(r"url\(|@import|src=\"(?!data:image/png;base64,)", source)


def test_every_image_says_what_it_shows(page):
    assert len(page.images) == 8
    assert all(len(image["alt"]) > 30 for image in page.images)
    assert len({image["alt"] for image in page.images}) == 8


def test_caveats_come_first(page):
    words = page.words
    assert words.count(INVENTED) == 1
    assert words.index(INVENTED) < words.index("Verdict")
    assert "a toy & no physics" in words
    assert words.count(CAVEAT[:40]) >= 3  # beside intervals, planes and single parameters


def test_user_text_is_escaped(built, page):
    assert "three <invented> searches" in page.words
    assert "<invented>" not in (built[0] / "report.html").read_text(encoding="utf-8")


def test_numbers_of_the_best_fit(built, page):
    summary = json.loads((built[0] / "summary.json").read_text(encoding="utf-8"))
    best = summary["best_fit"]["values"]
    assert f"{best['mass']:.4g}" in page.words
    assert "0.1193" in page.words
    assert "0.120 ± 0.012" in page.words
    assert "−0.058 σ" in page.words  # (0.1193 - 0.12)/0.012
    assert "2.6 × limit" in page.words  # 1.234e-46/4.7e-47
    assert "−4.213 ± 0.061" in page.words
    assert "1.2 %" in page.words.replace("\xa0", " ")  # flag


def test_disagreement_is_said_aloud(tmp_path):
    write_run(tmp_path / "run", walkers=60, steps=60, shift=0.2)
    nothing = {"planes": [], "decides": [], "marginals": [], "corner": [], "convergence": []}
    words = Page(render(Material.read(tmp_path / "run"), nothing)).words
    assert "disagree" in words[: words.index("Best fit")]


def test_unconverged_run_with_one_explorer(synthetic_folder, tmp_path):
    folder = tmp_path / "run"
    shutil.copytree(synthetic_folder, folder)
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    summary |= {"converged": False, "log_evidence": None, "log_evidence_error": None, "flags": {}, "caveats": []}
    summary["terms"] = {name: {**term, "caveats": []} for name, term in summary["terms"].items()}
    summary["explorers"] = {"ensemble": summary["explorers"]["ensemble"]}
    summary["comparison"] = {"verdict": "alone", "criterion": "", "effective_sizes": {}, "pairs": []}
    summary["planes"] = [["mass", "mediator_mass"], ["mass", "coupling"]]  # the first is fixed: no axis
    (folder / "summary.json").write_text(json.dumps(summary), encoding="utf-8")
    written = build_report(folder)
    words = Page(written[0].read_text(encoding="utf-8")).words
    assert "not converged" in words
    assert "one explorer" in words
    assert "Invented" not in words
    assert "Validity flags" not in words


def test_same_folder_gives_the_same_bytes(built, tmp_path):
    folder, written = built
    shutil.copytree(folder, tmp_path / "again")
    again = build_report(tmp_path / "again")
    assert [path.read_bytes() for path in again] == [path.read_bytes() for path in written]


def test_folder_without_a_run(tmp_path):
    with pytest.raises(RunFolderError, match="no finished run"):
        build_report(tmp_path)


def test_caveats_are_told_once_with_their_origin():
    summary = {"caveats": ["A"], "terms": {"one": {"caveats": ["A", "B"]}, "two": {"caveats": ["B", "C"]}}}
    assert caveats(summary) == [("run", "A"), ("one", "B"), ("two", "C")]


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (346.9023, "346.9"),
        (0.0123349, "0.01233"),
        (1.2343e-46, "1.234\u2009×\u200910<sup>−46</sup>"),
        (-4.2e-5, "−4.200\u2009×\u200910<sup>−5</sup>"),
        (9.9996e9, "1.000\u2009×\u200910<sup>10</sup>"),
        (0.0, "0"),
        (None, "–"),
        (float("nan"), "–"),
        (float("-inf"), "−∞"),
    ],
)
def test_numbers(value, expected):
    assert decoded(numbers.number(value)) == expected


def test_values_with_errors_intervals_and_shares():
    assert decoded(numbers.with_error(1.234e-46, 3e-48)) == "(1.234 ± 0.030)\u2009×\u200910<sup>−46</sup>"
    assert decoded(numbers.with_error(2.0, None)) == "2.000"
    assert decoded(numbers.with_error(346.9, 12.3)) == "347 ± 12"
    union = [[1.0, 2.0], [1.5e-47, 4.2e-46]]
    assert decoded(numbers.intervals(union)) == "[1.00, 2.00] ∪ [0.150, 4.20]\u2009×\u200910<sup>−46</sup>"
    assert decoded(numbers.intervals([])) == "–"
    assert decoded(numbers.percent(0.0)) == "0\xa0%"
    assert decoded(numbers.percent(3e-6)) == "<\u20090.01\xa0%"
    assert decoded(numbers.fixed(-0.001)) == "0.00"
    assert decoded(numbers.whole(1234567)) == "1\u202f234\u202f567"
    assert decoded(numbers.duration(4000)) == "1\xa0h 6\xa0min"


def decoded(markup):
    """Entities as characters; the tags stay."""
    from html import unescape

    return unescape(str(markup))


def test_formulas_become_pictures_and_text_is_escaped():
    found = rich_text(r"<b> $\sigma^\mathrm{SI}_p$ [cm²]")
    assert found.startswith("&lt;b&gt; <svg")
    assert 'aria-label="sigma' in found
    assert plain_text(r"$\langle\sigma v\rangle_0$ [cm³/s]") == "sigma v 0 [cm³/s]"
    assert rich_text("costs 5$") == "costs 5$"
