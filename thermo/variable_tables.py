"""The tables of the registry: every variable of every kind of file, as data.

``thermo.variables`` builds datasets from them and holds files against them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class Variable:
    """One variable of a file: what it is called, how it is laid out, what it means.

    ``units`` is a UDUNITS string, a rule ("@energy" …) or None where it has none (text, flags,
    columns whose unit differs by row). ``finite`` forbids NaN and ±inf. ``label`` marks
    auxiliary coordinates (CF §5, §6.1), named in the ``coordinates`` attribute of the others.
    """

    name: str
    dims: tuple[str, ...]
    dtype: str
    units: str | None
    long_name: str
    note: str = ""
    required: bool = True
    finite: bool = True
    label: bool = False
    flags: tuple[tuple[int, str], ...] = ()
    ancillary: str = ""


def _v(name: str, dims: str, dtype: str, unit: str | None, long: str, **more: Any) -> Variable:
    return Variable(name, tuple(dims.split()), dtype, unit, long, **more)


_GRID = "temperature field"
_OWN = "in the units that dataset_units gives for its dataset"
_LEVELS = (
    _v("energy", "level", "f8", "@model_energy", "energy of the level"),
    _v("weight", "level", "f8", "1", "number of states the level stands for"),
    _v("total_spin", "level", "f8", "1", "total spin S of the level", finite=False,
       note="missing where not resolved; such a level counts all its 2S+1 states"),
    _v("magnetic_number", "level", "f8", "1", "absolute magnetic quantum number |M| of the level",
       finite=False, note="missing where not resolved; the weight counts both signs of M"),
    _v("vector", "level", "i4", "1", "number of the random vector the level came from",
       note="-1: an exact level"),
    _v("sector", "level", "i4", "1", "index along block of the sector the level belongs to"),
    _v("sector_dimension", "block", "i8", "1", "dimension of the sector's matrix"),
    _v("sector_multiplicity", "block", "f8", "1", "number of equal sectors this one stands for"),
    _v("sector_magnetic_number", "block", "f8", "1", "magnetic quantum number of the sector",
       finite=False, note="missing where it is not conserved"),
    _v("sector_real", "block", "i1", None, "arithmetic of the sector's matrix",
       flags=((0, "complex"), (1, "real"))),
    # Of sampled levels only:
    _v("raw_weight", "level", "f8", "1", "number of states before the weights were calibrated",
       required=False, note="equal to weight for an exact level"),
    _v("trace_magnetic_number", "trace_group", "f8", "1",
       "absolute magnetic quantum number |M| of the group's states", finite=False, required=False,
       note="missing where it is not conserved"),
    _v("trace", "trace_group order", "f8", "1", "exact trace of a power of the scaled energy",
       required=False, note="of ((H - trace_center)/trace_scale)^order over both signs of M; "
       "order counts from 0"),
    _v("trace_order_used", "trace_group", "i8", "1",
       "highest order of trace that the levels' weights reproduce", required=False),
)  # fmt: skip
#: What a sampled levels file must hold on top; a full one holds none of it.
SAMPLED_VARIABLES = ("raw_weight", "trace_magnetic_number", "trace", "trace_order_used")
SAMPLED_ATTRS = ("trace_center", "trace_scale", "vectors", "steps", "seed")
_CURVES = (
    _v("temperature", "temperature", "f8", "@temperature", "temperature"),
    _v("field", "field", "f8", "@field", "magnetic field B"),
    _v("internal_energy", _GRID, "f8", "@energy", "internal energy", required=False),
    _v("free_energy", _GRID, "f8", "@energy", "free energy", required=False),
    _v("entropy", _GRID, "f8", "@entropy", "entropy", required=False),
    _v("specific_heat", _GRID, "f8", "@entropy", "specific heat at constant field",
       required=False),
    _v("susceptibility", _GRID, "f8", "@susceptibility", "differential magnetic susceptibility",
       required=False),
    _v("magnetization", _GRID, "f8", "@moment", "magnetic moment along the field",
       required=False),
    # Of curves along a stated direction, in the frame of the model's matrices:
    *(_v(f"magnetization_{a}", _GRID, "f8", "@moment",
         f"component of the magnetic moment along {a}", required=False) for a in "xyz"),
    *(_v(f"susceptibility_{ab}", _GRID, "f8", "@susceptibility",
         f"change of the magnetic moment along {ab[0]} with the field along {ab[1]}",
         required=False) for ab in ("xx", "yy", "zz", "xy", "xz", "yz")),
)  # fmt: skip
_EXCLUDED = (
    _v("excluded_temperature", "excluded_point", "f8", "@temperature",
       "temperature of a point left out because the cluster's size shows there", required=False),
    _v("excluded_field", "excluded_point", "f8", "@field", "its magnetic field", required=False),
    _v("excluded_observed", "excluded_point", "f8", None, "its measured value", note=_OWN,
       required=False),
    _v("excluded_dataset", "excluded_point", "i4", "1", "index along dataset of its dataset",
       required=False),
)  # fmt: skip
_FIT = (
    _v("parameter_name", "parameter", "str", None, "name of the parameter", label=True),
    _v("parameter_units", "parameter", "str", None, "units of the parameter"),
    _v("parameter_tie", "parameter", "str", None, "expression a tied parameter follows"),
    _v("parameter_role", "parameter", "i1", None, "how the parameter took part",
       flags=((0, "fixed"), (1, "free"), (2, "tied"))),
    _v("value", "parameter", "f8", None, "fitted value",
       note="in parameter_units", ancillary="standard_error at_bound"),
    _v("standard_error", "parameter", "f8", None, "standard error of the fitted value",
       finite=False, note="in parameter_units; missing for a fixed parameter"),
    _v("start", "parameter", "f8", None, "start value", note="in parameter_units"),
    _v("lower_bound", "parameter", "f8", None, "lower bound", finite=False,
       note="in parameter_units; -inf: none"),
    _v("upper_bound", "parameter", "f8", None, "upper bound", finite=False,
       note="in parameter_units; inf: none"),
    _v("at_bound", "parameter", "i1", None, "bound the fitted value sits at",
       flags=((-1, "lower"), (0, "none"), (1, "upper"))),
    _v("prior", "parameter", "f8", None, "value known beforehand", required=False, finite=False,
       note="in parameter_units; missing where there is none"),
    _v("prior_error", "parameter", "f8", None, "standard error of the value known beforehand",
       required=False, finite=False, note="in parameter_units"),
    _v("lower_68", "parameter", "f8", None, "lower end of the 68 % profile interval",
       required=False, finite=False, note="in parameter_units; missing where not looked for"),
    _v("upper_68", "parameter", "f8", None, "upper end of the 68 % profile interval",
       required=False, finite=False, note="in parameter_units; missing where not looked for"),
    _v("lower_95", "parameter", "f8", None, "lower end of the 95 % profile interval",
       required=False, finite=False, note="in parameter_units; missing where not looked for"),
    _v("upper_95", "parameter", "f8", None, "upper end of the 95 % profile interval",
       required=False, finite=False, note="in parameter_units; missing where not looked for"),
    _v("correlation", "parameter parameter_column", "f8", "1",
       "correlation of the estimates of two parameters", finite=False,
       note="the parameters run in the same order along both dimensions"),
    _v("temperature", "point", "f8", "@temperature", "temperature of the point", label=True),
    _v("field", "point", "f8", "@field", "magnetic field of the point", label=True),
    _v("observed", "point", "f8", None, "measured value", note=_OWN,
       ancillary="uncertainty"),
    _v("uncertainty", "point", "f8", None, "standard uncertainty of the measured value",
       finite=False, note=_OWN),
    _v("predicted", "point", "f8", None, "fitted model's value", note=_OWN),
    _v("residual", "point", "f8", None, "measured less predicted value", note=_OWN),
    _v("point_dataset", "point", "i4", "1", "index along dataset of the point's dataset"),
    _v("dataset_name", "dataset", "str", None, "name of the dataset", label=True),
    _v("dataset_quantity", "dataset", "str", None, "quantity the dataset measures"),
    _v("dataset_units", "dataset", "str", None, "units of the dataset's measured values",
       note="in these, observed, uncertainty, predicted and residual of its points are given"),
    _v("dataset_per", "dataset", "str", None, "per what molar values of the dataset are counted",
       note="ion: magnetic ions (sites), formula: formula units", required=False),
    _v("dataset_chi_square", "dataset", "f8", "1", "the dataset's share of chi square"),
    _v("chi_square", "", "f8", "1", "sum of squared residuals over uncertainties"),
    _v("reduced_chi_square", "", "f8", "1", "chi square per degree of freedom", finite=False),
    _v("degrees_of_freedom", "", "i4", "1", "points less free parameters"),
    _v("evaluations", "", "i4", "1", "number of times the model was evaluated"),
    _v("converged", "", "i1", None, "whether the fit converged",
       flags=((0, "no"), (1, "yes"))),
    _v("curve_temperature", "curve_point", "f8", "@temperature",
       "temperature along the fitted model's curve", required=False),
    _v("curve_field", "curve_point", "f8", "@field",
       "magnetic field along the fitted model's curve", required=False),
    _v("curve_predicted", "curve_point", "f8", None, "fitted model's curve", note=_OWN,
       required=False),
    _v("curve_dataset", "curve_point", "i4", "1", "index along dataset of the curve's dataset",
       required=False),
    _v("dataset_window", "dataset", "f8", "@temperature",
       "lowest temperature at which the size of the periodic cluster does not show in the data",
       required=False, finite=False, note="0: at none of the dataset's points; missing: not known"),
    _v("dataset_runs", "dataset", "f8", "1",
       "runs of residuals of one sign less those expected of chance, in standard deviations",
       required=False, finite=False, note="far below zero: the residuals follow a trend"),
    _v("dataset_durbin_watson", "dataset", "f8", "1",
       "Durbin-Watson statistic of the residuals", required=False, finite=False,
       note="near 2 for independent residuals, towards 0 where neighbours resemble each other"),
    *_EXCLUDED,
)  # fmt: skip
_COMPARISON = (
    _v("candidate_name", "candidate", "str", None, "name of the candidate", label=True),
    _v("candidate_model", "candidate", "str", None, "title of its model"),
    _v("candidate_bond_term", "candidate", "str", None, "sign and factor of its couplings"),
    _v("candidate_digest", "candidate", "str", None, "SHA-256 of the Hamiltonian in its file"),
    _v("candidate_remark", "candidate", "str", None, "what the comparison says of it"),
    _v("candidate_parameters", "candidate", "i4", "1", "number of free parameters"),
    _v("candidate_chi_square", "candidate", "f8", "1",
       "sum of squared residuals over uncertainties"),
    _v("candidate_reduced_chi_square", "candidate", "f8", "1", "chi square per degree of freedom",
       finite=False, note="missing where no uncertainties were stated"),
    _v("candidate_probability", "candidate", "f8", "1",
       "probability of a chi square as large by chance", finite=False),
    _v("candidate_aicc", "candidate", "f8", "1",
       "corrected Akaike information criterion, less the lowest of all", finite=False),
    _v("candidate_bic", "candidate", "f8", "1",
       "Bayesian information criterion, less the lowest of all"),
    _v("candidate_aicc_weight", "candidate", "f8", "1", "share of the Akaike weights"),
    _v("candidate_bic_weight", "candidate", "f8", "1", "share of the Bayesian weights"),
    _v("candidate_converged", "candidate", "i1", None, "whether its fit converged",
       flags=((0, "no"), (1, "yes"))),
    _v("candidate_standing", "candidate", "i1", None, "whether the data leave it standing",
       flags=((0, "no"), (1, "yes"))),
    _v("candidate_runs", "candidate dataset", "f8", "1",
       "runs of residuals of one sign less those expected of chance, in standard deviations",
       finite=False),
    _v("candidate_durbin_watson", "candidate dataset", "f8", "1",
       "Durbin-Watson statistic of the residuals", finite=False),
    _v("parameter_candidate", "parameter", "i4", "1", "index along candidate of the parameter's"),
    _v("parameter_name", "parameter", "str", None, "name of the parameter", label=True),
    _v("parameter_units", "parameter", "str", None, "units of the parameter"),
    _v("parameter_role", "parameter", "i1", None, "how the parameter took part",
       flags=((0, "fixed"), (1, "free"), (2, "tied"))),
    _v("value", "parameter", "f8", None, "fitted value", note="in parameter_units",
       ancillary="standard_error"),
    _v("standard_error", "parameter", "f8", None, "standard error of the fitted value",
       finite=False, note="in parameter_units; missing where it would mean nothing"),
    _v("temperature", "point", "f8", "@temperature", "temperature of the point", label=True),
    _v("field", "point", "f8", "@field", "magnetic field of the point", label=True),
    _v("observed", "point", "f8", None, "measured value", note=_OWN, ancillary="uncertainty"),
    _v("uncertainty", "point", "f8", None, "standard uncertainty of the measured value",
       finite=False, note=_OWN + "; missing where none was stated"),
    _v("predicted", "candidate point", "f8", None, "value of the candidate's fitted model",
       note=_OWN),
    _v("point_dataset", "point", "i4", "1", "index along dataset of the point's dataset"),
    _v("dataset_name", "dataset", "str", None, "name of the dataset", label=True),
    _v("dataset_quantity", "dataset", "str", None, "quantity the dataset measures"),
    _v("dataset_units", "dataset", "str", None, "units of the dataset's measured values"),
    _v("dataset_per", "dataset", "str", None, "per what molar values of the dataset are counted"),
    _v("dataset_window", "dataset", "f8", "@temperature",
       "lowest temperature at which the size of no periodic cluster shows in the data",
       finite=False, note="0: at none of the dataset's points; missing: not known"),
    *_EXCLUDED,
    _v("curve_temperature", "curve_point", "f8", "@temperature", "temperature along the curves"),
    _v("curve_field", "curve_point", "f8", "@field", "magnetic field along the curves"),
    _v("curve_dataset", "curve_point", "i4", "1", "index along dataset of the curve's dataset"),
    _v("curve_predicted", "candidate curve_point", "f8", None, "curve of each fitted model",
       note=_OWN),
    _v("proposal_name", "proposal", "str", None, "what would be measured", label=True,
       required=False),
    _v("proposal_quantity", "proposal", "str", None, "its quantity", required=False),
    _v("proposal_units", "proposal", "str", None, "units of its values", required=False),
    _v("proposal_per", "proposal", "str", None, "per what its molar values are counted",
       required=False),
    _v("proposal_temperature", "proposal", "f8", "@temperature",
       "temperature at which the candidates differ most", required=False),
    _v("proposal_field", "proposal", "f8", "@field", "field at which the candidates differ most",
       required=False),
    _v("proposal_separation", "proposal", "f8", "1",
       "difference of the two candidates furthest apart there, over its standard uncertainty",
       required=False, note="the instrument's precision and the fits' own uncertainties together"),
    _v("proposal_precision", "proposal", "f8", None, "the instrument's precision there",
       note="in proposal_units", required=False),
    _v("proposal_first", "proposal", "i4", "1", "index along candidate of the one of these two",
       required=False),
    _v("proposal_second", "proposal", "i4", "1", "index along candidate of the other",
       required=False),
    _v("proposal_predicted", "candidate proposal", "f8", None,
       "each candidate's value there", note="in proposal_units; missing for one ruled out",
       required=False, finite=False),
    _v("map_temperature", "map_point", "f8", "@temperature", "temperature of a possible point",
       required=False),
    _v("map_field", "map_point", "f8", "@field", "magnetic field of a possible point",
       required=False),
    _v("map_proposal", "map_point", "i4", "1", "index along proposal of what is measured there",
       required=False),
    _v("map_separation", "map_point", "f8", "1", "proposal_separation at this point",
       required=False, finite=False, note="missing where a cluster's size shows"),
)  # fmt: skip
_PAIRS, _WAVES = "temperature field pair_class", "temperature field q"
_CORRELATIONS = (
    _v("temperature", "temperature", "f8", "@temperature", "temperature"),
    _v("field", "field", "f8", "@field", "magnetic field B"),
    _v("pair_name", "pair_class", "str", None, "one pair of the class, by the names of its sites",
       label=True),
    _v("pair_first", "pair_class", "i4", "1", "index along site of the first site of this pair"),
    _v("pair_second", "pair_class", "i4", "1", "index along site of its second site",
       note="equal to the first in a class of single sites"),
    _v("pair_count", "pair_class", "i4", "1", "number of pairs in the class"),
    _v("site_name", "site", "str", None, "name of the site", label=True),
    _v("class_of_pair", "site other_site", "i4", "1", "index along pair_class of a pair's class"),
    _v("correlation", _PAIRS, "f8", "1", "thermal average of S_i . S_j over the class"),
    *(_v(f"correlation_{a}{a}", _PAIRS, "f8", "1",
         f"thermal average of S^{a}_i S^{a}_j over the class", required=False) for a in "xyz"),
    _v("wave_vector", "q direction", "f8", "1", "wave vector in reciprocal lattice units",
       required=False,
       note="times 2 pi it gives the phase of a site at a place in units of the cell's vectors"),
    _v("structure_factor", _WAVES, "f8", "1", "static structure factor", required=False,
       note="(1/N) sum over all pairs of sites of exp(i q.(r_i - r_j)) <S_i . S_j>"),
    *(_v(f"structure_factor_{a}{a}", _WAVES, "f8", "1",
         f"static structure factor of the {a} components", required=False) for a in "xyz"),
)  # fmt: skip
_MAGNETOCALORIC = (
    _v("temperature", "temperature", "f8", "@temperature", "temperature"),
    _v("field", "field", "f8", "@field", "magnetic field B"),
    _v("entropy_change", _GRID, "f8", "@entropy",
       "entropy less that at start_field and the same temperature"),
    _v("isentrope_temperature", _GRID, "f8", "@temperature",
       "temperature reached from that at start_field with the entropy kept", finite=False,
       note="missing where no temperature has that entropy"),
    _v("adiabatic_temperature_change", _GRID, "f8", "@temperature",
       "temperature reached with the entropy kept less that at start_field", finite=False,
       note="missing where no temperature has that entropy"),
    _v("magnetization_slope", _GRID, "f8", "@moment_slope",
       "change of the magnetic moment with temperature at constant field"),
    _v("gruneisen_ratio", _GRID, "f8", "@per_field", "magnetic Grueneisen ratio", finite=False,
       note="-(dM/dT)/C at constant field, equal to (1/T)(dT/dB) at constant entropy; missing "
       "where the specific heat vanishes"),
)  # fmt: skip
REGISTRY: dict[str, dict[str, Variable]] = {
    kind: {v.name: v for v in table}
    for kind, table in (
        ("levels", _LEVELS),
        ("curves", _CURVES),
        ("fit", _FIT),
        ("comparison", _COMPARISON),
        ("correlations", _CORRELATIONS),
        ("magnetocaloric", _MAGNETOCALORIC),
    )
}
