"""The report of a fit or a comparison as one HTML file that needs nothing else.

Pictures are inside it, nothing is fetched, no script runs; it reads on a phone and prints.
"""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from typing import Any

import xarray as xr

from thermo.errors import FileFormatError
from thermo.report import html_tables as tables
from thermo.report import style
from thermo.report.citations import citations
from thermo.report.comparison_picture import draw_comparison, draw_next
from thermo.report.fit_picture import draw_fit
from thermo.report.html_parts import bullets, details, esc, paragraph, picture, section
from thermo.report.html_style import page
from thermo.report.quantities import dataset_share
from thermo.report.statement import fit_statement, key_values
from thermo.storage import atomic_path

WORDS = {
    "preferred": ("good", "one candidate stands"),
    "undecided": ("open", "cannot be told apart"),
    "none": ("bad", "none describes the data"),
}


def html_report(
    fits: xr.Dataset | Mapping[str, xr.Dataset],
    path: str | os.PathLike[str],
    comparison: xr.Dataset | None = None,
) -> None:
    """Write the report of a fit dataset, or of a comparison with its candidates' fits by name.

    ``comparison`` comes from ``Comparison.to_dataset`` and names every key of ``fits``. The file
    is written whole or not at all. Raises FileFormatError where the datasets are others, or the
    file cannot be written.
    """
    named = {"": fits} if isinstance(fits, xr.Dataset) else dict(fits)
    kinds = [fit.attrs.get("content") for fit in named.values()]
    if not named or any(kind != "fit" for kind in kinds):
        raise FileFormatError("a report is made of fit datasets; give the result of a fit")
    if comparison is not None:
        names = [str(name) for name in comparison["candidate_name"].values]
        if sorted(names) != sorted(named):
            raise FileFormatError(
                "the comparison and the fits do not belong together: their names differ"
            )
        named = {name: named[name] for name in names}
    with style.style():
        text = _document(named, comparison)
    with atomic_path(path) as temporary:
        temporary.write_text(text, encoding="utf-8")


def _document(fits: Mapping[str, xr.Dataset], comparison: xr.Dataset | None) -> str:
    best = next(iter(fits.values()))
    source = best if comparison is None else comparison
    title = str(source.attrs["title"]).partition(": ")[2] or "Fit"
    several = comparison is not None and len(fits) > 1
    standing = [
        name
        for k, name in enumerate(fits)
        if comparison is None or int(comparison["candidate_standing"][k])
    ]
    shown = standing or list(fits)[:1]
    body = [
        "<header>",
        f"<h1>{esc(title)}</h1>",
        paragraph(_byline(source), "soft"),
        "</header>",
        "<main>",
        _verdict(best, comparison if several else None),
    ]
    if several and comparison is not None:
        body.append(section("Candidates", tables.candidates(comparison), _tests(comparison)))
        body.append(section("Data, fits and residuals", _comparison_pictures(comparison)))
        body.append(section("What to measure next", *_next(comparison)))
    else:
        body.append(section("Data, fit and residuals", _fit_pictures(best), tables.sets(best)))
    for heading, part in (
        ("Parameters", _parameters),
        ("In other conventions and units", _conversions),
        ("Correlations", lambda fit: tables.correlations(fit)),
        ("Window of trust", _window),
    ):
        body.append(section(heading, *_for_each(fits, shown, part, several)))
    body.append(section("Cautions", _cautions(fits, shown, comparison, several)))
    others = [name for name in fits if name not in shown]
    if others:
        inside = "".join(
            section(name, tables.parameters(fits[name]), level=3) for name in others
        )  # fmt: skip
        body.append(section("Ruled out", details("Their parameters at the best fit", inside)))
    profiled = any(tables.profiled(fit) for fit in fits.values())
    cited = bullets(citations(best.attrs, several, profiled))
    body.append(section("How to cite", cited, _own_words()))  # fmt: skip
    body.append(section("Where this comes from", *_provenance(fits, source, several)))
    body.append("</main>")
    return page(esc(title), "\n".join(part for part in body if part))


def _byline(source: xr.Dataset) -> str:
    made = str(source.attrs.get("history", "")).splitlines()[-1:] or [""]
    day = made[0].partition("T")[0]
    program = str(source.attrs.get("source", "partita"))
    return f"Fit report, {program}" + (f", {day}" if day else "")


def _verdict(fit: xr.Dataset, comparison: xr.Dataset | None) -> str:
    if comparison is None:
        kind, word, told = fit_statement(fit)
    else:
        kind, word = WORDS.get(str(comparison.attrs["conclusion"]), ("open", ""))
        told = str(comparison.attrs["verdict"])
    keys = "".join(f"<li>{esc(name)} = <b>{esc(value)}</b></li>" for name, value in key_values(fit))
    name = "" if comparison is None else str(comparison["candidate_name"].values[0])
    of = f'<p class="soft">Best fit, {esc(name)}:</p>' if name else ""
    return (
        f'<section class="verdict {kind}" aria-label="Verdict"><p class="word">{esc(word)}</p>'
        f'<p class="told">{esc(told)}</p></section>{of}<ul class="key">{keys}</ul>'
    )


def _fit_pictures(fit: xr.Dataset) -> str:
    made = []
    for n, name in enumerate(str(x) for x in fit["dataset_name"].values):
        figure = draw_fit(fit, [name], footer=False)
        made.append(picture(figure, f"{name}: data, fitted curve and residuals", _share(fit, n)))
    return f'<div class="pictures">{"".join(made)}</div>'


def _comparison_pictures(comparison: xr.Dataset) -> str:
    made = []
    for n, name in enumerate(str(x) for x in comparison["dataset_name"].values):
        figure = draw_comparison(comparison, [name])
        alt = f"{name}: data, the candidates' curves and their residuals"
        made.append(picture(figure, alt, _share(comparison, n)))
    return f'<div class="pictures">{"".join(made)}</div>'


def _share(dataset: xr.Dataset, index: int) -> str:
    name, share = str(dataset["dataset_name"].values[index]), dataset_share(dataset, index)
    edge = float(dataset["dataset_window"][index]) if "dataset_window" in dataset else 0.0
    shaded = "; shaded: where the size of the cluster shows" if edge > 0 else ""
    return f"{name}{', ' + share if share else ''}{shaded}"


def _tests(comparison: xr.Dataset) -> str:
    return details("Tests of the residuals", tables.residual_tests(comparison))


def _next(comparison: xr.Dataset) -> list[str]:
    if "proposal_name" not in comparison:
        return []
    told = str(comparison.attrs.get("proposals", "")).splitlines()
    made = [
        picture(draw_next(comparison, p), f"{name}: difference of the candidates, in uncertainties")
        for p, name in enumerate(str(x) for x in comparison["proposal_name"].values)
    ]
    note = (
        "Difference of the two candidates furthest apart, over the instrument's precision and the "
        "fits' own uncertainties together; the star is the best point, the dotted line three "
        "uncertainties. Lines end where the size of a cluster shows."
    )
    return [
        bullets([f"{line}." for line in told], ordered=True),
        f'<div class="pictures">{"".join(made)}</div>',
        paragraph(note, "soft"),
    ]


def _for_each(
    fits: Mapping[str, xr.Dataset], shown: Sequence[str], part: Any, several: bool
) -> list[str]:
    made = [(name, part(fits[name])) for name in shown]
    if not several:
        return [text for _, text in made]
    return [section(name, text, level=3) for name, text in made]


def _parameters(fit: xr.Dataset) -> str:
    term = fit.attrs.get("bond_term")
    note = f"Each bond counts once and adds {term} to H, as in the model file." if term else ""
    return tables.parameters(fit) + (paragraph(note, "soft") if note else "")


def _conversions(fit: xr.Dataset) -> str:
    return tables.conversions(fit)


def _window(fit: xr.Dataset) -> str:
    text = str(fit.attrs.get("window", ""))
    return (paragraph(text) if text else "") + tables.window(fit)


def _cautions(
    fits: Mapping[str, xr.Dataset],
    shown: Sequence[str],
    comparison: xr.Dataset | None,
    several: bool,
) -> str:
    told = [] if comparison is None else _lines(comparison.attrs.get("cautions"))
    for name in shown:
        lines = _lines(fits[name].attrs.get("cautions"))
        told += [f"{name}: {line}" if several else _capital(line) for line in lines]
    return bullets([f"{line}." for line in dict.fromkeys(told)])


def _capital(sentence: str) -> str:
    """A sentence with a capital, unless it begins with a name or a formula (J_1, chi0, g)."""
    word = sentence.split(maxsplit=1)[0] if sentence.strip() else ""
    return sentence[:1].upper() + sentence[1:] if word.isalpha() and len(word) > 2 else sentence


def _lines(text: Any) -> list[str]:
    return [line.rstrip(".") for line in str(text or "").splitlines() if line.strip()]


def _own_words() -> str:
    return paragraph(
        "Say in the paper which points were fitted, the bond term of J, what the uncertainties "
        "are, and above which temperature the cluster can be trusted; all of it is on this page.",
        "soft",
    )


def _provenance(fits: Mapping[str, xr.Dataset], source: xr.Dataset, several: bool) -> list[str]:
    best = next(iter(fits.values()))
    rows = [("Made", str(source.attrs.get("history", "")).splitlines()[-1:])]
    versions = _mapping(best.attrs.get("software"))
    rows.append(("Versions", [", ".join(f"{k} {v}" for k, v in versions.items())]))
    rows.append(("Constants", ["CODATA 2022"]))
    for name, fit in fits.items():
        label = f"Model of {name}, SHA-256" if several else "Model, SHA-256"
        rows.append((label, [str(fit.attrs.get("model_digest", ""))]))
    if best.attrs.get("study_text"):
        rows.append(("Study, SHA-256", [str(best.attrs.get("study_digest", ""))]))
    for name, value in _mapping(best.attrs.get("data_digests")).items():
        rows.append((f"Data {name}, SHA-256", [value]))
    listed = "".join(
        f"<li>{esc(name)}: <code>{esc(' '.join(value))}</code></li>"
        for name, value in rows
        if " ".join(value).strip()
    )
    texts = []
    if study := str(best.attrs.get("study_text", "")):
        texts.append(details("The study file", f"<pre>{esc(study)}</pre>"))
    for name, fit in fits.items():
        title = f"The model file of {name}" if several else "The model file"
        if text := str(fit.attrs.get("model_text", "")):
            texts.append(details(title, f"<pre>{esc(_indented(text))}</pre>"))
    return [f"<ul>{listed}</ul>", *texts]


def _indented(text: str) -> str:
    """A model kept as JSON, laid out for reading."""
    if not text.lstrip().startswith("{"):
        return text
    try:
        return json.dumps(json.loads(text), indent=1, ensure_ascii=False)
    except ValueError:
        return text


def _mapping(text: Any) -> dict[str, str]:
    try:
        found = json.loads(str(text or "{}"))
    except ValueError:
        return {}
    return {str(k): str(v) for k, v in found.items()} if isinstance(found, dict) else {}
