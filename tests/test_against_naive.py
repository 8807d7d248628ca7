"""The package against its slow twin, on random clusters: levels to 1e-10 of the bandwidth,
curves to 1e-8, whatever path the solver takes."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from threadpoolctl import threadpool_limits

import thermo
from tests import naive
from tests.solving import levels_of, reduced, repeated
from tests.strategies import (
    ANY_FORMS,
    ION_FORMS,
    ISOTROPIC_FORMS,
    SETTINGS,
    UNIAXIAL_FORMS,
    UNIAXIAL_IONS,
    Cluster,
    clusters,
    complete,
    ring,
    symmetric_clusters,
    uniform,
)
from thermo.errors import UnavailableError


@pytest.fixture(autouse=True, scope="module")
def _one_thread():
    """Matrices this small only lose time to more threads."""
    with threadpool_limits(1):
        yield


EVERYTHING = st.one_of(
    clusters(ANY_FORMS, ION_FORMS),
    symmetric_clusters(ANY_FORMS, ION_FORMS),
)
UNIAXIAL = st.one_of(
    clusters(UNIAXIAL_FORMS, UNIAXIAL_IONS),
    symmetric_clusters(UNIAXIAL_FORMS, UNIAXIAL_IONS),
)
ISOTROPIC = st.one_of(clusters(ISOTROPIC_FORMS), symmetric_clusters(ISOTROPIC_FORMS))


def scale_of(energies):
    """The bandwidth; for a spectrum of one value, that value's size; for one of zeros (free
    spins, terms that cancel), 1, the size of the couplings."""
    size = max(float(np.ptp(energies)), float(np.abs(energies).max()))
    return size if size > 1e-12 else 1.0


def check_levels(levels, want):
    """Sorted energies, each as often as it stands for states, to 1e-10 of the bandwidth."""
    got = repeated(levels)
    assert len(got) == len(want)
    assert np.abs(got - want).max() <= 1e-10 * scale_of(want)


# --- Levels ----------------------------------------------------------------------------------


@SETTINGS
@given(cluster=clusters(ANY_FORMS, ION_FORMS))
def test_levels_of_any_cluster(cluster):
    """Every bond form, ion terms, no symmetry to speak of."""
    check_levels(levels_of(cluster), naive.spectrum(cluster.hamiltonian()))


@SETTINGS
@given(cluster=symmetric_clusters(ANY_FORMS, ION_FORMS))
def test_levels_of_symmetric_clusters(cluster):
    """The same with many automorphisms."""
    check_levels(levels_of(cluster), naive.spectrum(cluster.hamiltonian()))


@SETTINGS
@given(cluster=UNIAXIAL)
def test_levels_by_magnetic_number(cluster):
    """Where Sz is conserved, each level's |M| (or S) is the twin's."""
    levels = levels_of(cluster)
    matrix = cluster.hamiltonian()
    want = naive.levels_by_magnetic_number(cluster.spins, matrix)
    energy, weight = levels["energy"].values, levels["weight"].values
    spin, number = levels["total_spin"].values, levels["magnetic_number"].values
    tolerance = 1e-10 * scale_of(np.concatenate(list(want.values())))
    for m, energies in want.items():
        if m < 0:
            continue
        if np.isfinite(spin).all():
            # A multiplet has one state of this M if S is large enough.
            chosen = spin >= m - 0.25
            count = weight[chosen] / (2 * spin[chosen] + 1)
        else:
            chosen = np.abs(number - m) < 0.25
            count = weight[chosen] / (2 if m > 0 else 1)
        assert np.allclose(count, np.rint(count), rtol=0, atol=1e-9)
        got = np.sort(np.repeat(energy[chosen], np.rint(count).astype(int)))
        assert len(got) == len(energies)
        assert np.abs(got - energies).max() <= tolerance


@SETTINGS
@given(cluster=ISOTROPIC)
def test_levels_by_total_spin(cluster):
    """Isotropic clusters: the multiplets of each S."""
    levels = levels_of(cluster)
    assert levels.attrs["resolved"] == "total_spin"
    want = naive.levels_by_total_spin(cluster.spins, cluster.hamiltonian())
    tolerance = 1e-10 * scale_of(np.concatenate(list(want.values())))
    energy, weight = levels["energy"].values, levels["weight"].values
    spin = levels["total_spin"].values
    assert sorted(want) == sorted(set(spin.tolist()))
    for s, energies in want.items():
        chosen = spin == s
        count = np.rint(weight[chosen] / (2 * s + 1)).astype(int)
        assert np.allclose(count * (2 * s + 1), weight[chosen], rtol=1e-12)
        got = np.sort(np.repeat(energy[chosen], count))
        assert len(got) == len(energies)
        assert np.abs(got - energies).max() <= tolerance


# --- Paths -----------------------------------------------------------------------------------

SWITCHES = [
    {"use_total_spin": s, "use_magnetization": m, "use_permutations": p}
    for s in (True, False)
    for m in (True, False)
    for p in (True, False)
    if m or not s
]


def solve_by(cluster, **switches):
    """The levels by one path of the solver."""
    from thermo.spectrum.full import solve_full

    return solve_full(thermo.read_model(cluster.mapping()), **switches)


@SETTINGS
@given(cluster=ISOTROPIC)
def test_every_path_gives_the_same_levels(cluster):
    """The S^2 path, the M path and the path with no symmetry, each with and without
    permutations: one spectrum."""
    want = naive.spectrum(cluster.hamiltonian())
    for switches in SWITCHES:
        check_levels(solve_by(cluster, **switches), want)


@SETTINGS
@given(cluster=EVERYTHING)
def test_every_path_without_total_spin(cluster):
    """The same for clusters of any kind."""
    want = naive.spectrum(cluster.hamiltonian())
    for switches in SWITCHES:
        if not switches["use_total_spin"]:
            check_levels(solve_by(cluster, **switches), want)


@SETTINGS
@given(cluster=EVERYTHING, data=st.data())
def test_relabelling_sites_changes_nothing(cluster, data):
    """Another order of sites and of terms: the same levels and calorics."""
    order = data.draw(st.permutations(range(len(cluster.spins))))
    one, other = levels_of(cluster), levels_of(cluster.relabelled(list(order)))
    check_levels(other, repeated(one))
    assert one.attrs["resolved"] == other.attrs["resolved"]
    scale = scale_of(repeated(one))
    a, b = (reduced(levels, [0.1 * scale, scale]) for levels in (one, other))
    assert sorted(a) == sorted(b)
    for name in ("specific_heat", "entropy"):
        assert np.allclose(a[name], b[name], rtol=1e-8, atol=1e-12)


# --- Invariants ------------------------------------------------------------------------------


@SETTINGS
@given(cluster=EVERYTHING)
def test_traces(cluster):
    """Sum of weights = product of 2S+1; Tr H and Tr H^2 of the twin's matrix, and of the
    package's closed forms from the couplings."""
    levels = levels_of(cluster)
    matrix = cluster.hamiltonian()
    energy, weight = levels["energy"].values, levels["weight"].values
    n = cluster.dimension
    scale = scale_of(energy)
    assert weight.sum() == n
    first, second = np.trace(matrix).real / n, np.einsum("ij,ji->", matrix, matrix).real / n
    assert weight @ energy / n == pytest.approx(first, rel=1e-12, abs=1e-12 * scale)
    assert weight @ energy**2 / n == pytest.approx(second, rel=1e-12, abs=1e-12 * scale**2)
    from thermo.model import exact_traces

    states, mean, square = exact_traces(thermo.read_model(cluster.mapping()))
    assert states == n
    assert mean == pytest.approx(first, rel=1e-12, abs=1e-12 * scale)
    assert square == pytest.approx(second, rel=1e-12, abs=1e-12 * scale**2)


@SETTINGS
@given(cluster=EVERYTHING)
def test_limits_of_the_entropy(cluster):
    """S -> ln(ground degeneracy) as T -> 0 and ln(number of states) as T -> infinity (third
    law and equipartition, exact)."""
    energies = naive.spectrum(cluster.hamiltonian())
    scale = scale_of(energies)
    degeneracy = int((energies < energies[0] + 1e-9 * scale).sum())
    above = energies[degeneracy:]
    levels, n = levels_of(cluster), len(cluster.spins)
    hot = reduced(levels, 1e6 * scale)["entropy"][0, 0] * n
    assert hot == pytest.approx(math.log(cluster.dimension), abs=1e-11)
    if len(above) and above[0] - energies[0] > 1e-5 * scale:
        # 1e-7 of the bandwidth is far above rounding and far below the first gap.
        cold = reduced(levels, 1e-7 * scale)["entropy"][0, 0] * n
        assert cold == pytest.approx(math.log(degeneracy), abs=1e-6)


# --- Curves ----------------------------------------------------------------------------------


def check_curves(got, want, sites, t, scale):
    """One point of the curves against the twin's averages, to 1e-8."""
    pairs = {
        "internal_energy": want.internal_energy,
        "free_energy": want.free_energy,
        "entropy": want.entropy,
        "specific_heat": want.specific_heat,
        "magnetization": want.moment,
        "susceptibility": want.moment_variance / t,
    }
    # Levels known to 1e-14 of the bandwidth: what that makes of each quantity near zero.
    noise = 1e-14 * scale / t
    floors = {
        "internal_energy": 1e-13 * scale,
        "free_energy": 1e-13 * scale,
        "entropy": 1e-12 + 10 * noise,
        "specific_heat": (10 * noise) ** 2 + 1e-250,
        "magnetization": 1e-12 + 10 * noise,
        "susceptibility": (1e-12 + 10 * noise) ** 2 / t + 1e-250,
    }
    for name, value in got.items():
        expected = pairs[name] / sites
        assert value == pytest.approx(expected, rel=1e-8, abs=floors[name] / sites), (name, t)


@SETTINGS
@given(cluster=UNIAXIAL)
def test_curves_in_field(cluster):
    """All six curves on a (T, B) grid where Sz is conserved."""
    matrix = cluster.hamiltonian()
    blocks = naive.levels_by_magnetic_number(cluster.spins, matrix)
    energy = np.concatenate(list(blocks.values()))
    m = np.concatenate([np.full(len(e), k) for k, e in blocks.items()])
    scale = scale_of(energy)
    temperatures = np.array([0.02, 0.1, 0.5, 3.0]) * max(scale, 1.0)
    fields = np.array([-1.1, 0.0, 0.3]) * max(scale, 1.0) / 3
    curves = reduced(levels_of(cluster), temperatures, fields)
    assert len(curves) == 6
    for k, t in enumerate(temperatures):
        for b, h in enumerate(fields):
            got = {name: values[k, b] for name, values in curves.items()}
            want = naive.canonical(energy, m, t, h)
            check_curves(got, want, len(cluster.spins), t, max(scale, 1.0))


@SETTINGS
@given(cluster=EVERYTHING)
def test_calorics_of_any_cluster(cluster):
    """Energy, free energy, entropy and C of any cluster at zero field; moments only where the
    field's axis is conserved."""
    energy = naive.spectrum(cluster.hamiltonian())
    scale = scale_of(energy)
    levels = levels_of(cluster)
    temperatures = np.array([0.01, 0.2, 1.0, 20.0]) * scale
    curves = reduced(levels, temperatures)
    for k, t in enumerate(temperatures):
        want = naive.canonical(energy, None, t)
        got = {
            name: values[k, 0]
            for name, values in curves.items()
            if name not in ("susceptibility", "magnetization")
        }
        assert len(got) == 4
        check_curves(got, want, len(cluster.spins), t, scale)
    if levels.attrs["resolved"] == "none":
        assert "susceptibility" not in curves
        assert "magnetization" not in curves
        with pytest.raises(UnavailableError):
            reduced(levels, 1.0, 0.5)


def test_field_against_diagonalisation_in_the_field():
    """A field along z is diagonalised with the rest by the twin: nothing is assumed of it."""
    cluster = Cluster(
        (0.5, 1.0, 1.5, 0.5),
        (
            (0, 1, "J", "isotropic"),
            (1, 2, "J", "xy"),
            (3, 2, "K", ("antisymmetric", (0.0, 0.0, 1.0))),
            (0, 3, "K", "ising"),
        ),
        {"J": 1.0, "K": -0.7},
        ((1, "K", "axial"), (2, "J", "axial")),
    )
    curves = reduced(levels_of(cluster), [0.15, 2.0], [-1.5, 0.0, 0.8])
    for k, t in enumerate([0.15, 2.0]):
        for b, h in enumerate([-1.5, 0.0, 0.8]):
            want = naive.canonical_in_field(*cluster.naive_terms(), t, h)
            got = {name: values[k, b] for name, values in curves.items()}
            check_curves(got, want, 4, t, 10.0)


EXTREMES = {
    "four-ring": ring(4),
    "frustrated triangle": ring(3),
    "ferromagnet": complete(5, value=-1.0),
    "spin-1 ring": ring(4, 1.0),
    "XX ring": ring(6, form="xy"),
    "mixed": uniform([0.5, 2.5, 1.0], [(0, 1), (1, 2)], value=-2.0),
    "very uneven": Cluster(
        (0.5, 0.5, 0.5, 0.5),
        ((0, 1, "J", "isotropic"), (1, 2, "K", "isotropic"), (2, 3, "J", "isotropic")),
        {"J": 1.0, "K": 1e-3},
    ),
    "one spin alone": Cluster((1.5,), (), {"J": 1.0}),
    "one spin with its ion term": Cluster((1.5,), (), {"J": 1.0}, ((0, "J", "axial"),)),
    "free spins": uniform([0.5, 1.0], [(0, 1)], value=0.0),
    "dimer far from zero energy": Cluster(
        (1.0, 1.0), ((0, 1, "J", "isotropic"),), {"J": 1.0, "D": 1e3},
        ((0, "D", ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0))),),
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", EXTREMES)
@pytest.mark.filterwarnings("error")
def test_from_the_coldest_to_the_hottest(name):
    """T = 1e-3 to 1e6: no overflow, no warning, C >= 0 and chi >= 0, and the twin's values with
    fifty digits."""
    cluster = EXTREMES[name]
    blocks = naive.levels_by_magnetic_number(cluster.spins, cluster.hamiltonian())
    energy = np.concatenate(list(blocks.values()))
    m = np.concatenate([np.full(len(e), k) for k, e in blocks.items()])
    temperatures = 10.0 ** np.arange(-3, 7)
    fields = [0.0, 1e-3, 1.0, 1e4]
    curves = reduced(levels_of(cluster), temperatures, fields)
    n = len(cluster.spins)
    for values in curves.values():
        assert np.all(np.isfinite(values))
    assert np.all(curves["specific_heat"] >= 0)
    assert np.all(curves["susceptibility"] >= 0)
    assert np.all(curves["entropy"] >= -1e-12)
    assert np.all(curves["entropy"] * n <= math.log(cluster.dimension) + 1e-12)
    for k, t in enumerate(temperatures):
        for b, h in enumerate(fields):
            want = naive.canonical(energy, m, t, h, exact=True)
            got = {name: values[k, b] for name, values in curves.items()}
            scale = max(scale_of(energy), h * float(m.max()))
            check_curves(got, want, n, t, scale)
