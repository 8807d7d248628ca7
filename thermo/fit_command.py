"""What ``partita fit`` does once its command line is read: one model fitted, or rivals compared."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from thermo.messages import confirm, tell_notes
from thermo.progress import work

if TYPE_CHECKING:
    import xarray as xr

    from thermo.fit.candidates import Rivals


def run_fit(
    study: Path,
    output: Path | None,
    picture: Path | None,
    report: Path | None,
    memory: str | None,
    keep: Path | None = None,
) -> None:
    """Fit a study, print the result, and write the files asked for."""
    from thermo.fit.candidates import read_rivals

    rivals = read_rivals(study)
    for notes in dict.fromkeys(one.model.notes for one in rivals.studies):
        tell_notes(notes)
    if len(rivals.studies) > 1:
        result, fits = _compare(rivals, memory, keep)
    else:
        result, fits = _fit_one(rivals, memory, keep)
    if output is not None:
        import thermo

        thermo.write(result, output)
        confirm(f"wrote {output}")
    if picture is not None:
        import thermo

        thermo.plot(result, picture)
        confirm(f"wrote {picture}")
    if report is not None:
        from thermo.report import html_report

        html_report(fits, report, result if len(fits) > 1 else None)
        confirm(f"wrote {report}")


def _fit_one(
    rivals: Rivals, memory: str | None, keep: Path | None
) -> tuple[xr.Dataset, Mapping[str, xr.Dataset]]:
    from thermo.fit import fit
    from thermo.report import print_fit

    problem = rivals.studies[0]
    found = work(lambda progress: fit(problem, progress=progress, memory=memory, cache=keep))
    result = found.to_dataset()
    print_fit(result)
    tell_notes(found.cautions)
    return result, {rivals.names[0]: result}


def _compare(
    rivals: Rivals, memory: str | None, keep: Path | None
) -> tuple[xr.Dataset, Mapping[str, xr.Dataset]]:
    from thermo.fit.candidates import compare
    from thermo.report import print_comparison

    found = work(lambda progress: compare(rivals, progress=progress, memory=memory, cache=keep))
    result = found.to_dataset()
    print_comparison(result)
    told = list(found.cautions)
    for candidate in found.standing:
        told += [f"{candidate.name}: {caution}" for caution in candidate.result.cautions]
    tell_notes(list(dict.fromkeys(told)))
    return result, {c.name: c.result.to_dataset() for c in found.candidates}
