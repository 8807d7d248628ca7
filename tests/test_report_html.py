"""The HTML report and the LaTeX table, from invented fits: what is in them, and what may not be."""

from __future__ import annotations

import base64
import io
import re
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest

import thermo
from tests import report_samples as samples
from tests.fitting import dimer_chi, write_dimer
from tests.rivals import network, parameters, rival_study
from thermo.errors import FileFormatError, UnavailableError
from thermo.report import export_latex, html_report
from thermo.report.conversions import forms
from thermo.report.html_tables import between
from thermo.report.latex import escape, number

VOID = {"meta", "img", "br", "link", "hr", "input"}
HOSTILE = '<script>alert("x")</script> & \'{%$#~^_\\'


class Page(HTMLParser):
    """Tags in order with their attributes, all text, and whether every tag is closed."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""
        self.open: list[str] = []
        self.heads: list[str] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open, tag
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open and self.open[-1] == "h2":
            self.heads.append(data)
        if self.open and self.open[-1] not in ("style", "script"):
            self.text += data + "\n"


def report(fits, path: Path, comparison=None) -> tuple[str, Page]:
    html_report(fits, path, comparison)
    text = path.read_text(encoding="utf-8")
    page = Page(text)
    assert page.open == []
    return text, page


@pytest.fixture(scope="module")
def dimer_fit(tmp_path_factory):
    return thermo.fit(write_dimer(tmp_path_factory.mktemp("dimer"), noise=1.0)).to_dataset()


@pytest.fixture(scope="module")
def rivals(tmp_path_factory):
    """A dimer with and without a second coupling: undecided, so that every section is there."""
    folder = tmp_path_factory.mktemp("rivals")
    T = np.geomspace(8.0, 300.0, 40)
    chi = dimer_chi(T, 60.0, 2.1)
    error = 0.01 * chi
    chi = chi + error * np.random.default_rng(1).standard_normal(len(T))
    content = rival_study(folder, T, chi, error, ("dimer", "uniform chain"), title=HOSTILE)
    square = {
        **network("dimer"),
        "couplings": {"J": 60.0, "K": 10.0},
        "site": [{"spin": 0.5, "g": 2.1}] * 4,
        "bond": [
            {"sites": [a, b], "coupling": c}
            for a, b, c in ((0, 1, "J"), (2, 3, "J"), (1, 2, "K"), (3, 0, "K"))
        ],
        "title": HOSTILE,
    }
    content["candidate"].append(
        {"name": HOSTILE, "model": square, "parameters": parameters("ladder")}
    )
    found = thermo.compare(content)
    assert found.conclusion == "undecided"
    return {c.name: c.result.to_dataset() for c in found.candidates}, found.to_dataset()


def test_it_is_one_file_that_fetches_and_runs_nothing(dimer_fit, rivals, tmp_path):
    for text, page in (
        report(dimer_fit, tmp_path / "one.html"),
        report(rivals[0], tmp_path / "many.html", rivals[1]),
    ):
        assert text.startswith("<!DOCTYPE html>")
        for tag, attributes in page.tags:
            assert tag not in ("script", "link", "iframe", "object", "embed", "form", "base", "a")
            assert not any(name.startswith("on") for name in attributes)
            assert "style" not in attributes
            for name in ("src", "href", "action"):
                assert (attributes.get(name) or "data:image/svg+xml;base64,").startswith("data:")
        assert "url(" not in text.replace("data:", "")
        assert "@import" not in text
        policy = [a for t, a in page.tags if t == "meta" and a.get("http-equiv")]
        assert policy[0]["content"].startswith("default-src 'none'")
        assert any(a.get("name") == "viewport" for t, a in page.tags if t == "meta")
        assert page.tags[0] == ("html", {"lang": "en"})
        pictures = [a for t, a in page.tags if t == "img"]
        assert len(pictures) >= 2
        for picture in pictures:
            assert picture["alt"]
            svg = base64.b64decode(picture["src"].partition(",")[2]).decode()
            assert "<svg" in svg
            assert "<image" not in svg
            assert "<script" not in svg
        assert "@media print" in text


def test_what_a_user_wrote_is_only_ever_text(rivals, tmp_path):
    text, page = report(rivals[0], tmp_path / "r.html", rivals[1])
    assert "<script" not in text
    assert "alert(&quot;x&quot;)" in text
    assert HOSTILE in page.text
    assert page.text.count(HOSTILE) > 5


def test_the_verdict_comes_first_and_every_part_follows(rivals, dimer_fit, tmp_path):
    _, page = report(rivals[0], tmp_path / "many.html", rivals[1])
    assert page.text.index("cannot be told apart") < page.text.index("Candidates")
    assert page.heads == [
        "Candidates", "Data, fits and residuals", "What to measure next", "Parameters",
        "In other conventions and units", "Correlations", "Window of trust",
        "Ruled out", "How to cite", "Where this comes from",
    ]  # fmt: skip
    for word in ("AICc", "Akaike", "Schwarz", "Durbin", "SHA-256", "numpy", "CODATA 2022"):
        assert word in page.text
    assert rivals[1].attrs["verdict"] in page.text
    for digest in rivals[1]["candidate_digest"].values:
        assert str(digest) in page.text
    _, page = report(dimer_fit, tmp_path / "one.html")
    assert "The model describes the data" in page.text
    assert "no rival was tried" in page.text
    assert "Candidates" not in page.text
    assert "taken as all there is" in page.text
    assert dimer_fit.attrs["study_text"].strip().splitlines()[-1] in page.text


def test_couplings_in_every_convention(dimer_fit, tmp_path):
    """By hand: H = J S·S in K is −2J' S·S with J' = −J/2; 1 meV = 11.60451812 K,
    1 cm⁻¹ = 1.438776878 K (CODATA 2022)."""
    _, page = report(dimer_fit, tmp_path / "one.html")
    J = float(dimer_fit["value"][0])
    table = page.text[page.text.index("In other conventions") : page.text.index("Correlations")]
    shown = [
        float(text.replace("\u2212", "-"))
        for text in re.findall(r"^([-\u2212]?[\d.]+)\(", table, re.MULTILINE)
    ]
    expected = [
        sign * J / unit for sign in (1, -1, 0.5, -0.5) for unit in (1.0, 11.60451812, 1.438776878)
    ]
    np.testing.assert_allclose(shown, expected, rtol=2e-4)
    for term in ("+J S.S", "\u2212J S.S", "+2J S.S", "\u22122J S.S"):
        assert term in table


def test_forms_of_couplings():
    table = {(f.bond_term, f.unit): f for f in forms("bond", "-2J S.S", "cm-1")}
    assert len(table) == 12
    assert table["-2J S.S", "cm-1"].own
    assert sum(f.own for f in table.values()) == 1
    assert table["+J S.S", "cm-1"].factor == -2
    assert table["+2J S.S", "cm-1"].factor == -1
    assert table["-J S.S", "K"].factor == pytest.approx(2 * 1.438776878, rel=1e-9)
    # A single-ion term has no sign convention; without a unit there is none to convert.
    assert [(f.bond_term, f.unit) for f in forms("ion", "-2J S.S", "meV")] == [
        ("", "K"), ("", "meV"), ("", "cm-1"),
    ]  # fmt: skip
    assert {f.unit for f in forms("bond", "+J S.S", "1")} == {"1"}


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"converged": 0}, "did not converge"),
        ({"reduced_chi_square": 4.0}, "does not describe the data within their uncertainties"),
        ({"dataset_runs": [-6.0, 0.0], "reduced_chi_square": 1.2}, "The model misses something"),
        ({"dataset_runs": [-6.0, 0.0], "reduced_chi_square": 0.3}, "too large, or not independent"),
        ({"at_bound": [1, 0, 0, 0, 0]}, "at a bound"),
        ({}, "describes the data"),
    ],
)
def test_the_statement_of_a_single_fit(tmp_path, change, words):
    fit = samples.fit()
    fit["dataset_runs"] = ("dataset", [0.0, 0.0])
    fit["dataset_durbin_watson"] = ("dataset", [2.0, 1.9])
    for name, value in change.items():
        fit[name] = fit[name].copy(data=np.asarray(value, dtype=fit[name].dtype))
    _, page = report(fit, tmp_path / "r.html")
    verdict = page.text[: page.text.index("Data, fit and residuals")]
    assert words in verdict


def test_a_fit_by_its_scatter_claims_nothing_of_chi_square(tmp_path):
    fit = samples.fit(scatter=True)
    _, page = report(fit, tmp_path / "r.html")
    assert "without stated uncertainties" in page.text
    assert "chance of a larger one" not in page.text


def test_several_fields_and_dimensionless_fits_are_reported(tmp_path):
    report(samples.fit(several_fields=True), tmp_path / "a.html")
    fit = samples.fit()
    fit.attrs["energy_unit"] = "1"
    report(fit, tmp_path / "b.html")


def test_only_fits_and_their_own_comparison_are_reported(rivals, tmp_path):
    with pytest.raises(FileFormatError, match="made of fit datasets"):
        html_report(samples.levels(), tmp_path / "r.html")
    with pytest.raises(FileFormatError, match="made of fit datasets"):
        html_report({}, tmp_path / "r.html")
    with pytest.raises(FileFormatError, match="names differ"):
        html_report({"other": samples.fit()}, tmp_path / "r.html", rivals[1])
    with pytest.raises(FileFormatError, match="directory does not exist"):
        html_report(samples.fit(), tmp_path / "no" / "r.html")
    assert list(tmp_path.iterdir()) == []


def test_the_page_of_a_file_is_that_of_the_fit(dimer_fit, tmp_path):
    thermo.write(dimer_fit, tmp_path / "fit.nc")
    a, _ = report(dimer_fit, tmp_path / "a.html")
    b, _ = report(thermo.read(tmp_path / "fit.nc"), tmp_path / "b.html")
    assert a == b


def test_profile_intervals_are_shown_and_cited(tmp_path):
    fit = samples.fit()
    for end, shift in (("lower", -1.0), ("upper", 1.5)):
        for level, width in (("68", 1), ("95", 2)):
            ends = np.full(fit.sizes["parameter"], np.nan)
            ends[0] = 40.12 + shift * width
            fit[f"{end}_{level}"] = ("parameter", ends)
    _, page = report(fit, tmp_path / "r.html")
    assert "39.1 to 41.6" in page.text
    assert "38.1 to 43.1" in page.text
    assert "James and M. Roos" in page.text


def test_the_page_is_the_same_every_time(dimer_fit, tmp_path):
    report(dimer_fit, tmp_path / "a.html")
    report(dimer_fit, tmp_path / "b.html")
    assert (tmp_path / "a.html").read_bytes() == (tmp_path / "b.html").read_bytes()


# ---------------------------------------------------------------- LaTeX


def balanced(text: str) -> bool:
    depth = 0
    for found in re.finditer(r"\\.|[{}]", text, re.DOTALL):
        depth += {"{": 1, "}": -1}.get(found[0], 0)
        assert depth >= 0
    return depth == 0


def latex(dataset) -> str:
    stream = io.StringIO()
    export_latex(dataset, stream)
    return stream.getvalue()


def test_the_latex_table_of_a_fit(dimer_fit, tmp_path):
    text = latex(dimer_fit)
    assert balanced(text)
    assert text.isascii()
    assert "paramagnetic\\_fraction & $0.0" in text
    assert "\\times 10^{-4}" in text
    assert r"J \,\mathbf{S}_i\cdot\mathbf{S}_j" in text
    rows = [line for line in text.splitlines() if line.endswith("\\\\")]
    assert len(rows) == 1 + dimer_fit.sizes["parameter"]
    assert {line.count("&") for line in rows} == {3}
    export_latex(dimer_fit, tmp_path / "t.tex")
    assert (tmp_path / "t.tex").read_text() == text


def test_the_latex_table_of_a_comparison_sets_hostile_names(rivals):
    text = latex(rivals[1])
    assert balanced(text)
    # The name keeps its reserved characters as text, so the columns stay six separators wide.
    rows = [re.sub(r"\\.", "", line) for line in text.splitlines() if line.endswith("\\\\")]
    assert {line.count("&") for line in rows} == {6}
    assert "%" not in re.sub(r"\\%", "", text)


def test_latex_pieces():
    assert escape("J_{1}%") == r"J\_\{1\}\%"
    assert escape("χ²₀ 漢") == r"$\chi$$^{2}$$_{0}$ ?"
    assert number(-5.6e-5, 6.9e-6) == r"$-5.60(69) \times 10^{-5}$"
    assert number(float("nan")) == "---"


def test_no_latex_of_levels():
    with pytest.raises(UnavailableError, match=r"export it as \.csv"):
        export_latex(samples.levels(), io.StringIO())


# ---------------------------------------------------------------- the command


def test_the_command_compares_and_reports(partita, tmp_path):
    T = np.geomspace(8.0, 300.0, 30)
    chi = dimer_chi(T, 60.0, 2.1)
    rival_study(tmp_path, T, chi * (1 + 0.01 * np.sin(37 * T)), 0.01 * chi)
    toml = """
format = 1
title = "invented"
[[candidate]]
name = "dimer"
model = "dimer.toml"
[[candidate]]
name = "chain"
model = "chain.toml"
[[data]]
name = "chi"
file = "chi.csv"
quantity = "susceptibility"
units = "emu/mol"
columns = { temperature = "T", value = "chi", uncertainty = "error" }
[parameters]
J = { start = 50.0, lower = 1.0, upper = 200.0 }
g = { lower = 1.5 }
"""
    (tmp_path / "study.toml").write_text(toml)
    head = 'format = 1\nenergy_unit = "K"\nbond_term = "+J S.S"\ncouplings = { J = 50.0 }\n'
    (tmp_path / "dimer.toml").write_text(
        head + "finite = true\n[[site]]\nspin = 0.5\n[[site]]\nspin = 0.5\n[[bond]]\n"
        'sites = [0, 1]\ncoupling = "J"\n'
    )
    (tmp_path / "chain.toml").write_text(
        head + '[lattice]\nname = "chain"\nsize = [8]\nspin = 0.5\ncouplings = { nearest = "J" }\n'
    )
    done = partita("fit", "study.toml", "-o", "c.nc", "--report", "r.html", "--picture", "p.png")
    assert done.returncode == 0, done.stderr
    assert "Verdict: 'dimer' describes the data" in done.stdout
    assert "ruled out" in done.stdout
    assert thermo.read(tmp_path / "c.nc").attrs["conclusion"] == "preferred"
    assert "one candidate stands" in (tmp_path / "r.html").read_text()
    assert partita("export", "c.nc", "-o", "t.tex").returncode == 0
    assert partita("export", "c.nc", "--what", "points").stdout.startswith("dataset,")
    assert partita("plot", "c.nc", "-o", "again.svg").returncode == 0
    # Two of one name, and a report that is no page: one sentence each, and nothing written.
    (tmp_path / "twice.toml").write_text(toml.replace('"chain"', '"dimer"', 1))
    for arguments, code, words in (
        (("fit", "twice.toml", "--report", "x.html"), 3, "two candidates are called 'dimer'"),
        (("fit", "study.toml", "--report", "x.pdf"), 4, "must end in .html"),
        (("export", "c.nc", "-o", "x.tex", "--what", "next"), 3, "leave --what"),
    ):
        done = partita(*arguments)
        assert done.returncode == code
        assert words in done.stderr
        assert len(done.stderr.strip().splitlines()) == 1
        assert not list(tmp_path.glob("x.*"))


@pytest.mark.parametrize(
    ("low", "high", "text"),
    [
        (123.238, 131.12, "123.2 to 131.1"),
        (-3.6745e-5, 1.7578e-5, "(\u22123.7 to 1.8)×10⁻⁵"),
        (0.0, 0.062289, "0 to 0.062"),
        (0.0085573, 0.049632, "0.009 to 0.050"),
        (2.0018, 2.0021, "2.00180 to 2.00210"),
        (float("nan"), 2.1, "? to 2.1"),
        (-np.inf, 150.0, "\u2212∞ to 150"),
        (0.0, 0.0, "0 to 0"),
    ],
)
def test_intervals_to_two_digits_of_their_width(low, high, text):
    assert between(low, high) == text
