"""The package against exact formulas: clusters, XX rings and chains, Ising rings.

Temperatures from 0.02 J to 50 J. Sources stand in tests/references.py and are named here again.
"""

from __future__ import annotations

import math
from functools import cache
from itertools import combinations

import mpmath
import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from tests import references as ref
from tests.solving import lattice_mapping, levels_of, reduced
from tests.strategies import complete, ring, uniform

TEMPERATURES = np.array(ref.TEMPERATURES)
TINY = 1e-250  # below this a value is as good as zero


def check_cluster(form, levels, degenerate=False):
    """Every curve of one cluster against its closed form.

    Where the ground level holds several multiplets, rounding parts them by 1e-14 of the
    bandwidth W, which is a specific heat of (1e-14 W/T)^2 of its own: 1e-25 at T = 0.02.
    """
    width = float(np.ptp(levels["energy"].values)) if degenerate else 0.0
    curves = {name: values[:, 0] for name, values in reduced(levels, TEMPERATURES).items()}
    n = form.sites
    for k, t in enumerate(ref.TEMPERATURES):
        for name in ("specific_heat", "susceptibility"):
            want = getattr(form, name)(t) / n
            noise = (1e-14 * width / t) ** 2 if name == "specific_heat" else 0.0
            assert curves[name][k] == pytest.approx(want, rel=1e-10, abs=noise + TINY), (name, t)
        for name in ("free_energy", "internal_energy"):
            # These pass through zero; 1e-12 of the cluster's scale is what doubles carry.
            want = getattr(form, name)(t) / n
            assert curves[name][k] == pytest.approx(want, rel=1e-11, abs=1e-12), (name, t)
        assert curves["entropy"][k] == pytest.approx(form.entropy(t) / n, abs=1e-12), t
        assert abs(curves["magnetization"][k]) < 1e-12


@cache
def spin_half_clusters():
    """Name -> (closed form, cluster)."""
    found = {
        "dimer": (ref.DIMER, uniform([0.5] * 2, [(0, 1)])),
        "equilateral trimer": (ref.EQUILATERAL_TRIMER, ring(3)),
        "linear trimer": (ref.LINEAR_TRIMER, uniform([0.5] * 3, [(0, 1), (1, 2)])),
        "four-ring": (ref.FOUR_RING, ring(4)),
        "spin-1 dimer": (ref.SPIN_1_DIMER, uniform([1, 1], [(0, 1)])),
    }
    for n in range(2, 11):
        found[f"complete graph of {n}"] = (ref.complete_graph(n), complete(n))
    for twice in range(1, 8):
        spin = twice / 2
        found[f"dimer of spin {spin}"] = (ref.spin_dimer(twice), uniform([spin] * 2, [(0, 1)]))
    return found


@pytest.mark.parametrize("name", spin_half_clusters())
def test_clusters(name):
    """Bleaney and Bowers, Proc. R. Soc. A 214, 451 (1952); Kambe, J. Phys. Soc. Jpn 5, 48
    (1950); exact."""
    form, cluster = spin_half_clusters()[name]
    graph = name.startswith("complete graph") and len(cluster.spins) > 2
    check_cluster(form, levels_of(cluster), degenerate=graph or name == "equilateral trimer")


@pytest.mark.parametrize(
    ("term", "value"), [("+J S.S", 1.0), ("-J S.S", -1.0), ("+2J S.S", 0.5), ("-2J S.S", -0.5)]
)
def test_every_bond_term_means_what_it_says(term, value):
    """The same four-ring written in each convention (Kambe 1950, exact)."""
    check_cluster(ref.FOUR_RING, levels_of(ring(4, value=value, bond_term=term)))


@pytest.mark.parametrize(
    ("name", "size", "boundary", "form"),
    [
        ("chain", [2], "open", ref.DIMER),
        ("chain", [3], "open", ref.LINEAR_TRIMER),
        ("chain", [3], "periodic", ref.EQUILATERAL_TRIMER),
        ("chain", [4], "periodic", ref.FOUR_RING),
        ("square", [2, 2], "open", ref.FOUR_RING),
    ],
)
def test_clusters_by_lattice_name(name, size, boundary, form):
    """The same closed forms from a named lattice."""
    mapping = lattice_mapping(name, size, {"nearest": 1.0}, boundary=boundary)
    check_cluster(form, levels_of(mapping), degenerate=form is ref.EQUILATERAL_TRIMER)


def test_dimer_maxima():
    """chi_max = 0.20118191 at 0.62361801 and C_max = 0.51174528 at 0.35149521 per spin (exact)."""
    levels = levels_of(uniform([0.5] * 2, [(0, 1)]))
    for name, at, value in [
        ("susceptibility", ref.DIMER_CHI_MAX_AT, ref.DIMER_CHI_MAX),
        ("specific_heat", ref.DIMER_C_MAX_AT, ref.DIMER_C_MAX),
    ]:
        found = minimize_scalar(
            lambda t, name=name: -reduced(levels, t)[name][0, 0],
            bounds=(0.1, 2.0),
            method="bounded",
            options={"xatol": 1e-9},
        )
        assert -found.fun == pytest.approx(value, abs=6e-9)
        # A maximum is found to the root of the values' precision.
        assert found.x == pytest.approx(at, abs=3e-7)


def check_in_field(levels, sites, log_z, fields, temperatures=TEMPERATURES):
    """All six curves on a (T, h) grid against derivatives of a closed ln Z(x, h)."""
    curves = reduced(levels, temperatures, fields)
    for b, h in enumerate(fields):
        for k, t in enumerate(temperatures):
            want = {name: v / sites for name, v in ref.in_field(log_z, t, h).items()}
            got = {name: values[k, b] for name, values in curves.items()}
            for name in ("specific_heat", "susceptibility"):
                # Degenerate ground levels are equal to 1e-14 only: see check_cluster.
                noise = (1e-14 * sites / t) ** 2
                assert got[name] == pytest.approx(want[name], rel=1e-10, abs=noise), (name, t, h)
            assert got["free_energy"] == pytest.approx(want["free_energy"], rel=1e-11, abs=1e-12)
            assert got["internal_energy"] == pytest.approx(
                want["internal_energy"], rel=1e-11, abs=1e-12
            )
            # 1e-14 of rounding between levels that should be equal is 1e-14/T in a probability.
            assert got["entropy"] == pytest.approx(want["entropy"], abs=1e-12)
            assert got["magnetization"] == pytest.approx(
                want["magnetization"], rel=1e-10, abs=1e-12
            )


FIELDS = [-1.3, 0.0, 0.37]


@pytest.mark.parametrize("n", [3, 4, 5, 6, 7, 8, 10])
def test_xx_rings(n):
    """Lieb, Schultz and Mattis, Ann. Phys. 16, 407 (1961); Katsura, Phys. Rev. 127, 1508
    (1962); exact, both parities."""
    levels = levels_of(ring(n, form="xy"))
    grid = TEMPERATURES if n <= 6 else TEMPERATURES[::3]
    check_in_field(levels, n, lambda x, h: ref.xx_ring_log_z(n, x, h), FIELDS, grid)


@pytest.mark.parametrize("n", [5, 6])
def test_ferromagnetic_xx_rings_by_lattice_name(n):
    """The same with J = -1 (on an odd ring this is another problem)."""
    levels = levels_of(lattice_mapping("chain", [n], {"nearest": (-1.0, "xy")}))
    check_in_field(
        levels, n, lambda x, h: ref.xx_ring_log_z(n, x, h, -1), [0.0, 0.37], TEMPERATURES[::3]
    )


@pytest.mark.parametrize("n", [2, 5, 8, 9])
def test_xx_open_chains(n):
    """Lieb, Schultz and Mattis (1961), exact."""
    levels = levels_of(lattice_mapping("chain", [n], {"nearest": (1.0, "xy")}, boundary="open"))
    check_in_field(
        levels, n, lambda x, h: ref.xx_open_log_z(n, x, h), [0.0, 0.37], TEMPERATURES[::3]
    )


def test_long_xx_ring_is_the_infinite_chain_when_warm():
    """Katsura (1962), exact: finite size enters when all N bonds are used, as (J/2T)^N, so at
    T = 5 a ring of 12 is the infinite chain to twelve digits."""
    levels = levels_of(ring(12, form="xy"))
    for t in [2.0, 5.0, 20.0]:
        curves = reduced(levels, t)
        want = ref.xx_infinite(t)
        for name in ("specific_heat", "susceptibility", "internal_energy", "free_energy"):
            nearness = (1 / (2 * t)) ** 12 + 1e-12
            assert curves[name][0, 0] == pytest.approx(want[name], rel=nearness), (name, t)


@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize("n", [3, 4, 5, 8, 11])
def test_ising_rings(n, sign):
    """Ising, Z. Phys. 31, 253 (1925), transfer matrix with the field along z; exact."""
    levels = levels_of(ring(n, form="ising", value=float(sign)))
    grid = TEMPERATURES if n <= 5 else TEMPERATURES[::3]
    check_in_field(levels, n, lambda x, h: ref.ising_ring_log_z(n, x, h, sign), FIELDS, grid)
    zero = reduced(levels, TEMPERATURES)
    for k, t in enumerate(ref.TEMPERATURES):
        # Z = (2 cosh J/4T)^N + (-2 sinh J/4T)^N as printed, with digits enough to subtract.
        with mpmath.workdps(ref.DIGITS):
            a = sign / (4 * mpmath.mpf(t))
            z = (2 * mpmath.cosh(a)) ** n + (-2 * mpmath.sinh(a)) ** n
            log_z = float(mpmath.log(z))
        assert zero["free_energy"][k, 0] * n == pytest.approx(-t * log_z, rel=1e-11)


@pytest.mark.parametrize("n", [6, 9])
def test_ising_chains_by_lattice_name(n):
    """The same from [lattice]; and a long ring against the infinite chain (exact)."""
    levels = levels_of(lattice_mapping("chain", [n], {"nearest": (1.0, "ising")}))
    check_in_field(
        levels, n, lambda x, h: ref.ising_ring_log_z(n, x, h), [0.0, 0.5], TEMPERATURES[::3]
    )
    for t in [4.0, 30.0]:
        # The second eigenvalue is tanh(J/4T) of the first; C's two derivatives bring N^2.
        curves, size = reduced(levels, t), n * n * math.tanh(1 / 4 / t) ** (n - 2)
        for name, want in ref.ising_infinite(t).items():
            assert curves[name][0, 0] == pytest.approx(want, rel=4 * size + 1e-11)


@pytest.mark.parametrize(("name", "n"), [("complete", 4), ("ring", 6)])
def test_a_ferromagnet_in_field(name, n):
    """A free moment: for J -> -J at T << |J| the cluster is one spin N/2, M = Brillouin
    function (textbook, exact to exp(-gap/T))."""
    cluster = complete(n, value=-1.0) if name == "complete" else ring(n, value=-1.0)
    t, spin = 0.01, n / 2
    m = np.arange(-spin, spin + 1)
    fields = np.array([0.0, 0.004, 0.02])
    curves = reduced(levels_of(cluster), t, fields)
    for b, h in enumerate(fields):
        p = np.exp(m * h / t)
        p /= p.sum()
        assert curves["magnetization"][0, b] * n == pytest.approx(p @ m, rel=1e-12, abs=1e-13)
        variance = p @ (m - p @ m) ** 2
        assert curves["susceptibility"][0, b] * n == pytest.approx(variance / t, rel=1e-12)
    assert curves["entropy"][0, 0] * n == pytest.approx(math.log(2 * spin + 1), rel=1e-12)


def test_a_zero_field_row_is_the_same_in_a_grid():
    """A (T, B) grid holds the curves at each field alone."""
    levels = levels_of(ring(5))
    grid = reduced(levels, [0.3, 2.0], [0.0, 0.7])
    for b, h in enumerate([0.0, 0.7]):
        for name, values in reduced(levels, [0.3, 2.0], h).items():
            assert np.allclose(values[:, 0], grid[name][:, b], rtol=1e-14, atol=0)


def test_pairs_listed_twice_add_up():
    """Two half-strength bonds on each pair are one bond (exact)."""
    pairs = list(combinations(range(4), 2)) * 2
    check_cluster(ref.complete_graph(4), levels_of(uniform([0.5] * 4, pairs, value=0.5)), True)
